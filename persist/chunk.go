package persist

import (
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"hash"
	"hash/crc32"

	"leadline.example/engine"
)

const (
	formatVersion = 1 // of chunks and of checkpoint values; that of the file is in file.go

	chunkFirst   = 1 // the chunk begins a group
	chunkFurther = 2 // the chunk goes on with the group of the chunk before

	// fixedHeader is hashed; then come, in a first chunk, what is known only
	// when the group is encoded, and the header's own checksum.
	fixedHeader   = 16
	groupHeader   = 8 + sha256.Size
	headerSum     = 4
	firstHeader   = fixedHeader + groupHeader + headerSum
	furtherHeader = fixedHeader + headerSum

	// chunkBytes bounds a chunk of several records, header included: four of
	// them with their keys fill a 4 KiB page (16 bytes of page header, 16 per
	// element, 8 per key). Bigger ones are no faster and slower to look into;
	// and a last page of up to four keys isn't split, see node.splitTwo of bbolt.
	chunkBytes = 996
	// maxChunkBytes bounds what is believed of a length read from a file: a
	// chunk of one record that long is damage.
	maxChunkBytes = 64 << 20
)

// span is one chunk in the buffer of an encoder.
type span struct {
	from, to int
	header   int
	records  int
}

// encoder encodes groups, using its buffers again.
type encoder struct {
	buf    []byte
	keys   []byte // 8 a chunk
	chunks []span
	hash   hash.Hash
}

func newEncoder() *encoder { return &encoder{hash: sha256.New()} }

// encode turns stamped records, at least one, into chunks and returns the hash
// of the group. Key and value are valid until the next call.
func (e *encoder) encode(records []engine.Record, previous [sha256.Size]byte) [sha256.Size]byte {
	e.buf, e.keys, e.chunks = e.buf[:0], e.keys[:0], e.chunks[:0]
	commit := records[0].CommitTime
	e.begin(&records[0], firstHeader)
	c := start(commit)
	for i := range records {
		last := &e.chunks[len(e.chunks)-1]
		at := len(e.buf)
		e.buf = c.appendRecord(e.buf, &records[i])
		if last.records > 0 && len(e.buf)-last.from > chunkBytes {
			e.buf = e.buf[:at]
			last.to = at
			e.begin(&records[i], furtherHeader)
			last = &e.chunks[len(e.chunks)-1]
			c = start(commit)
			e.buf = c.appendRecord(e.buf, &records[i])
		}
		last.records++
		last.to = len(e.buf)
	}
	return e.seal(len(records), commit, previous)
}

func (e *encoder) begin(r *engine.Record, header int) {
	at := len(e.buf)
	e.buf = append(e.buf, make([]byte, header)...)
	e.keys = binary.BigEndian.AppendUint64(e.keys, uint64(r.Position))
	e.chunks = append(e.chunks, span{from: at, to: len(e.buf), header: header})
}

func (e *encoder) seal(records int, commit engine.Instant, previous [sha256.Size]byte) (sum [sha256.Size]byte) {
	e.hash.Reset()
	e.hash.Write(previous[:])
	for i, s := range e.chunks {
		h := e.buf[s.from : s.from+fixedHeader]
		h[0], h[1] = formatVersion, chunkFurther
		if i == 0 {
			h[1] = chunkFirst
		}
		binary.LittleEndian.PutUint16(h[2:], uint16(s.records))
		binary.LittleEndian.PutUint32(h[4:], uint32(s.to-s.from-s.header))
		binary.LittleEndian.PutUint64(h[8:], uint64(commit))
		e.hash.Write(e.key(i))
		e.hash.Write(h)
		e.hash.Write(e.buf[s.from+s.header : s.to])
	}
	e.hash.Sum(sum[:0])
	g := e.buf[fixedHeader:]
	binary.LittleEndian.PutUint32(g, uint32(records))
	binary.LittleEndian.PutUint32(g[4:], uint32(len(e.chunks)))
	copy(g[8:], sum[:])
	for i, s := range e.chunks {
		end := s.from + s.header - headerSum
		binary.LittleEndian.PutUint32(e.buf[end:], keyedSum(e.key(i), e.buf[s.from:end]))
	}
	return sum
}

func (e *encoder) key(i int) []byte   { return e.keys[8*i : 8*i+8] }
func (e *encoder) value(i int) []byte { return e.buf[e.chunks[i].from:e.chunks[i].to] }

// keyedSum is the checksum of a value with its key, so that neither a wrong
// value nor a right one in the wrong place passes.
func keyedSum(key, value []byte) uint32 {
	return crc32.Update(crc32.Checksum(key, castagnoli), castagnoli, value)
}

// chunk is a chunk as read: a verified header and its records' bytes.
type chunk struct {
	position engine.Position // of its first record
	records  int
	commit   engine.Instant
	body     []byte
	fixed    []byte // the hashed part of the header

	first        bool // of a group; then also:
	groupRecords int
	groupChunks  int
	hash         [sha256.Size]byte
}

// parseChunk checks header and lengths; the records are checked by decoder.
func parseChunk(key, value []byte) (c chunk, err error) {
	if len(key) != 8 {
		return c, fmt.Errorf("its key has %d bytes", len(key))
	}
	c.position = engine.Position(binary.BigEndian.Uint64(key))
	if len(value) < furtherHeader {
		return c, fmt.Errorf("its chunk has only %d bytes", len(value))
	}
	header := furtherHeader
	if c.first = value[1] == chunkFirst; c.first {
		header = firstHeader
	}
	if len(value) < header {
		return c, fmt.Errorf("its chunk has only %d bytes", len(value))
	}
	end := header - headerSum
	if keyedSum(key, value[:end]) != binary.LittleEndian.Uint32(value[end:]) {
		return c, errors.New("the checksum of its chunk's header doesn't match")
	}
	if value[0] > formatVersion {
		return c, ErrNewer
	}
	c.fixed, c.body = value[:fixedHeader], value[header:]
	c.records = int(binary.LittleEndian.Uint16(value[2:]))
	c.commit = engine.Instant(binary.LittleEndian.Uint64(value[8:]))
	if n := int(binary.LittleEndian.Uint32(value[4:])); n != len(c.body) {
		return c, fmt.Errorf("its chunk has %d bytes of records, not %d", len(c.body), n)
	}
	if c.first {
		c.groupRecords = int(binary.LittleEndian.Uint32(value[fixedHeader:]))
		c.groupChunks = int(binary.LittleEndian.Uint32(value[fixedHeader+4:]))
		copy(c.hash[:], value[fixedHeader+8:])
	}
	return c, nil
}

// end is the position after the chunk's last record.
func (c *chunk) end() engine.Position { return c.position + engine.Position(c.records) }

// decoder decodes the records of a chunk one by one.
type decoder struct {
	before
	rest     []byte
	position engine.Position
	commit   engine.Instant
	left     int
}

func (c *chunk) decoder() decoder {
	return decoder{before: start(c.commit), rest: c.body, position: c.position, commit: c.commit, left: c.records}
}

// next decodes one record into r; it returns false, nil after the last.
func (d *decoder) next(r *engine.Record) (bool, error) {
	if d.left == 0 {
		if len(d.rest) != 0 {
			return false, errors.New("its chunk has bytes after the last record")
		}
		return false, nil
	}
	body, rest, err := takeFrame(d.rest)
	if err != nil {
		return false, err
	}
	if err := d.decodeBody(body, r); err != nil {
		return false, err
	}
	r.Position, r.CommitTime = d.position, d.commit
	d.rest, d.left = rest, d.left-1
	d.position++
	return true, nil
}
