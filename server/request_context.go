package server

import (
	"context"
	"net/http"
	"slices"
	"strings"

	"google.golang.org/grpc/metadata"

	"leadline.example/engine"
)

// Metadata keys, and in lower case the HTTP headers, that requests may carry.
const (
	keyIfMatch     = "if-match"
	keyIfNoneMatch = "if-none-match"
	keyRequestID   = "x-request-id"
)

const maxRequestIDBytes = 128

// forwardedKeys are the HTTP headers that a service sees.
var forwardedKeys = [...]string{keyIfMatch, keyIfNoneMatch, keyRequestID}

// forwardedHeader tells the gateway which HTTP headers a service sees.
func forwardedHeader(name string) (string, bool) {
	key := strings.ToLower(name)
	return key, slices.Contains(forwardedKeys[:], key)
}

// gatewayHeader returns the header that the gateway gets. It is built from what
// is wanted, not cleaned of what isn't: the gateway takes a deadline from
// Grpc-Timeout and metadata from more headers than one would guess.
func gatewayHeader(in http.Header, media string) http.Header {
	out := http.Header{"Accept": {media}, "Content-Type": {media}}
	for _, key := range forwardedKeys {
		if values := in.Values(key); len(values) > 0 {
			out[http.CanonicalHeaderKey(key)] = values
		}
	}
	return out
}

// incoming returns the one value of a metadata key, or "".
func incoming(ctx context.Context, key string) (string, error) {
	values := metadata.ValueFromIncomingContext(ctx, key)
	if len(values) > 1 {
		return "", refuse(engine.InvalidField, key, key+" is given more than once; give it once")
	}
	if len(values) == 0 {
		return "", nil
	}
	return strings.TrimSpace(values[0]), nil
}

// requestID returns the caller's name for the request, which the ledger keeps.
func requestID(ctx context.Context) (string, error) {
	id, err := incoming(ctx, keyRequestID)
	if err != nil {
		return "", err
	}
	return id, checkRequestID(id)
}

func checkRequestID(id string) error {
	visible := func(r rune) bool { return r > ' ' && r <= '~' }
	if len(id) > maxRequestIDBytes || strings.IndexFunc(id, func(r rune) bool { return !visible(r) }) >= 0 {
		return refuse(engine.InvalidField, keyRequestID, keyRequestID+" is longer than 128 bytes or has a character that isn't visible ASCII; shorten it or leave it out")
	}
	return nil
}

// conditionOf joins the conditions of a request: If-Match and If-None-Match, and
// the etag that it carries.
func conditionOf(ctx context.Context, etag string) (engine.Condition, error) {
	var c engine.Condition
	match, err := incoming(ctx, keyIfMatch)
	if err != nil {
		return c, err
	}
	if strings.Contains(match, ",") {
		return c, refuse(engine.InvalidField, keyIfMatch, "if-match names several ETags; give the one you have seen")
	}
	match, etag = bareETag(match), bareETag(etag)
	if match != "" && match != "*" && etag != "" && match != etag {
		return c, refuse(engine.ETagMismatch, "etag", "etag is not the ETag of If-Match; give one of the two")
	}
	c.IfMatch = match
	if etag != "" {
		c.IfMatch = etag
	}
	none, err := incoming(ctx, keyIfNoneMatch)
	if err != nil {
		return c, err
	}
	if none != "" && none != "*" {
		return c, refuse(engine.InvalidField, keyIfNoneMatch, "if-none-match is not *; give * to declare only what doesn't exist, or leave it out")
	}
	c.IfNoneMatch = none == "*"
	return c, nil
}

// bareETag takes an entity tag out of its quotes (RFC 9110, 8.8.3).
func bareETag(tag string) string {
	return strings.Trim(strings.TrimPrefix(strings.TrimSpace(tag), "W/"), `"`)
}

func quotedETag(tag string) string { return `"` + tag + `"` }
