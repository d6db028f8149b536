package server

import (
	"bytes"
	"fmt"

	"google.golang.org/grpc"
	"google.golang.org/protobuf/encoding/protowire"
	"google.golang.org/protobuf/proto"

	"leadline.example/engine"
)

// A message over the limit has to be refused with a reason, but neither gRPC's
// own limit nor an error of the codec can carry one. So gRPC's limit is higher,
// the codec marks a message that is too large instead of decoding it, and the
// interceptors refuse what is marked before a service sees it.

// tooLargeMark stands in for what was not decoded: an unknown field with the
// highest of all numbers.
func tooLargeMark() []byte {
	return protowire.AppendVarint(protowire.AppendTag(nil, protowire.MaxValidNumber, protowire.VarintType), 1)
}

func markTooLarge(v any) {
	switch m := v.(type) {
	case *wireBatch:
		*m = wireBatch{err: messageTooLarge()}
	case proto.Message:
		proto.Reset(m)
		m.ProtoReflect().SetUnknown(tooLargeMark())
	}
}

func isTooLarge(v any) bool {
	m, ok := v.(proto.Message)
	return ok && bytes.Equal(m.ProtoReflect().GetUnknown(), tooLargeMark())
}

func messageTooLarge() error {
	return refuse(engine.BodyTooLarge, "", fmt.Sprintf("the message is larger than %d bytes; send the readings in several", maxBodyBytes))
}

// sizedStream refuses messages of a stream that are too large.
type sizedStream struct{ grpc.ServerStream }

// RecvMsg implements grpc.ServerStream.
func (s sizedStream) RecvMsg(m any) error {
	if err := s.ServerStream.RecvMsg(m); err != nil {
		return err
	}
	if isTooLarge(m) {
		return messageTooLarge()
	}
	return nil
}
