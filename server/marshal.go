package server

import (
	"errors"
	"fmt"
	"io"
	"reflect"

	"github.com/go-json-experiment/json/jsontext"
	"github.com/grpc-ecosystem/grpc-gateway/v2/runtime"
	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
)

// marshalJSON writes a message in the dialect of the interface: snake_case,
// zero values present, what is absent left out. protojson adds white space at
// random, which differs between builds; it is taken out.
func marshalJSON(m proto.Message) ([]byte, error) {
	b, err := protojson.MarshalOptions{UseProtoNames: true, EmitDefaultValues: true}.Marshal(m)
	if err != nil {
		return nil, err
	}
	value := jsontext.Value(b)
	if err := value.Compact(); err != nil {
		return nil, err
	}
	return append(value, '\n'), nil
}

// decodedBody is the body of a request that the REST handler has decoded
// already. The gateway's decoder recognises it; so all errors about a body come
// from one place.
type decodedBody struct {
	io.ReadCloser
	message proto.Message
}

// bodyDecoder hands the message of a decodedBody to the gateway.
type bodyDecoder struct{ r io.Reader }

// Decode sets v, which is a message or points to a pointer to one.
func (d bodyDecoder) Decode(v any) error {
	body, ok := d.r.(*decodedBody)
	if !ok {
		return errors.New("the body was not decoded before it reached the gateway")
	}
	if into, ok := v.(proto.Message); ok {
		proto.Merge(into, body.message)
		return nil
	}
	target, source := reflect.ValueOf(v), reflect.ValueOf(body.message)
	if target.Kind() != reflect.Pointer || target.Elem().Type() != source.Type() {
		return fmt.Errorf("a body of %T can't be decoded into %T", body.message, v)
	}
	target.Elem().Set(source)
	return nil
}

// codec is what the gateway's two marshalers share.
type codec struct{}

// NewDecoder is called with the body that the REST handler put in place.
func (codec) NewDecoder(r io.Reader) runtime.Decoder { return bodyDecoder{r} }

// Unmarshal is not used: the gateway decodes by NewDecoder.
func (codec) Unmarshal([]byte, any) error {
	return errors.New("bodies are decoded before they reach the gateway")
}

// jsonCodec writes answers as JSON.
type jsonCodec struct{ codec }

// ContentType is that of JSON.
func (jsonCodec) ContentType(any) string { return mediaJSON }

// Marshal writes a message.
func (jsonCodec) Marshal(v any) ([]byte, error) {
	m, ok := v.(proto.Message)
	if !ok {
		return nil, fmt.Errorf("%T is not a message", v)
	}
	return marshalJSON(m)
}

// NewEncoder is for streams, which the gateway doesn't serve here.
func (c jsonCodec) NewEncoder(w io.Writer) runtime.Encoder { return encoder(w, c.Marshal) }

// textCodec writes answers as text for people.
type textCodec struct{ codec }

// wordsPage is an answer already put into words.
type wordsPage string

// ContentType is that of plain text.
func (textCodec) ContentType(any) string { return mediaText + "; charset=utf-8" }

// Marshal writes a page; a message that nobody put into words is written as JSON.
func (textCodec) Marshal(v any) ([]byte, error) {
	if text, ok := v.(wordsPage); ok {
		return []byte(text), nil
	}
	return jsonCodec{}.Marshal(v)
}

// NewEncoder is for streams, which the gateway doesn't serve here.
func (c textCodec) NewEncoder(w io.Writer) runtime.Encoder { return encoder(w, c.Marshal) }

func encoder(w io.Writer, marshal func(any) ([]byte, error)) runtime.Encoder {
	return runtime.EncoderFunc(func(v any) error {
		b, err := marshal(v)
		if err == nil {
			_, err = w.Write(b)
		}
		return err
	})
}
