package server

import (
	"encoding/base64"
	"encoding/binary"
	"hash/crc32"
	"hash/fnv"
	"strconv"

	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
)

// A page token is opaque to clients: base64url, without padding, of
//
//	byte    0      version, 1
//	bytes   1..8   FNV-1a of the list's name and its other parameters
//	bytes   9..    cursor: where the page before ended
//	last 4 bytes   CRC-32C of all before
//
// It rests on nothing but the request, so it holds over restarts. The checksum
// tells a damaged token from one of other parameters; it guards no secret.
const (
	tokenVersion = 1
	tokenHead    = 1 + 8
	tokenTail    = 4
)

func castagnoli(b []byte) uint32 { return crc32.Checksum(b, crc32.MakeTable(crc32.Castagnoli)) }

// binding hashes the parameters to which a token is bound, each with its length.
func binding(parameters ...string) uint64 {
	h := fnv.New64a()
	for _, p := range parameters {
		h.Write(binary.AppendUvarint(nil, uint64(len(p))))
		h.Write([]byte(p))
	}
	return h.Sum64()
}

// timeKey is a time as a parameter of binding; empty for none.
func timeKey(t *timestamppb.Timestamp) string {
	if t == nil {
		return ""
	}
	return strconv.FormatInt(t.GetSeconds(), 10) + "." + strconv.Itoa(int(t.GetNanos()))
}

func encodePageToken(bound uint64, cursor []byte) string {
	b := make([]byte, 0, tokenHead+len(cursor)+tokenTail)
	b = append(b, tokenVersion)
	b = binary.BigEndian.AppendUint64(b, bound)
	b = append(b, cursor...)
	b = binary.BigEndian.AppendUint32(b, castagnoli(b))
	return base64.RawURLEncoding.EncodeToString(b)
}

// decodePageToken returns the cursor of a token that was made for the same
// parameters.
func decodePageToken(token string, bound uint64) ([]byte, error) {
	b, err := base64.RawURLEncoding.Strict().DecodeString(token)
	if err != nil || len(b) < tokenHead+tokenTail || b[0] != tokenVersion {
		return nil, invalidToken("page_token is not one of this service; send the next_page_token of the page before, unchanged")
	}
	body, sum := b[:len(b)-tokenTail], binary.BigEndian.Uint32(b[len(b)-tokenTail:])
	if castagnoli(body) != sum {
		return nil, invalidToken("page_token is damaged; send the next_page_token of the page before, unchanged")
	}
	if binary.BigEndian.Uint64(body[1:]) != bound {
		return nil, invalidToken("page_token belongs to other parameters; repeat those of the first page, or begin anew without page_token")
	}
	return body[tokenHead:], nil
}

func invalidToken(message string) error {
	return refuse(engine.InvalidField, "page_token", message)
}

// Page sizes.
const (
	defaultPageSize = 100
	maxPageSize     = 1000
)

func pageSize(asked int32) (int, error) {
	switch {
	case asked < 0:
		return 0, refuse(engine.InvalidField, "page_size", "page_size is negative; give 1 to 1000, or leave it out for 100")
	case asked == 0:
		return defaultPageSize, nil
	}
	return min(int(asked), maxPageSize), nil
}
