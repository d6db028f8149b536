package server

import (
	"context"
	"net/http"

	"github.com/grpc-ecosystem/grpc-gateway/v2/runtime"
	"google.golang.org/grpc/codes"
	"google.golang.org/protobuf/proto"

	"leadline.example/engine"
)

// httpStatus is the usual HTTP status of a gRPC code.
func httpStatus(code codes.Code) int { return runtime.HTTPStatusFromCode(code) }

// writeETag is the gateway's hook that puts the ETag of a quantity or an
// instrument into the header.
func writeETag(_ context.Context, w http.ResponseWriter, message proto.Message) error {
	if d, ok := message.(declared); ok {
		w.Header().Set("ETag", quotedETag(d.GetEtag()))
	}
	return nil
}

// errorBody writes a google.rpc.Status as JSON, or the same in words.
func errorBody(media string, f failure) (body []byte, contentType string) {
	if media == mediaText {
		e := &engine.Error{Reason: reasonOf(f.status), Field: fieldOf(f.status), Message: f.status.Message()}
		if e.Reason == "" {
			e.Reason = engine.Reason(f.status.Code().String())
		}
		return []byte(errorText(e)), textCodec{}.ContentType(nil)
	}
	body, err := marshalJSON(f.status.Proto())
	if err != nil { // a detail whose type is not linked in, which none of ours is
		body = []byte(`{"code":13,"message":"the error can't be written","details":[]}`)
	}
	return body, mediaJSON
}
