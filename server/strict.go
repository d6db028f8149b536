package server

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"strconv"
	"strings"

	"github.com/go-json-experiment/json/jsontext"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/reflect/protoreflect"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// The JSON dialect. protojson takes camelCase aliases, numbers as strings, NaN
// as a string and enums by number, and its errors name no field. A client that
// leans on any of that would break on the day another decoder serves its route,
// so bodies are decoded here, by the descriptors: snake_case names only,
// numbers as numbers, enums by name, no name twice, nothing after the object,
// null the same as absent. Whatever else decodes a body has to agree with this.

// strictDecoder decodes one body.
type strictDecoder struct {
	tokens *jsontext.Decoder
	path   []string // of the value being read, for errors
}

// decodeStrict decodes a body into an empty message. mayBeEmpty admits a body
// without any JSON, for a message in which nothing is required.
func decodeStrict(body []byte, into proto.Message, mayBeEmpty bool) error {
	if len(bytes.TrimLeft(body, " \t\r\n")) == 0 {
		if mayBeEmpty {
			return nil
		}
		return refuse(engine.MalformedBody, "", "the body is empty; send a JSON object")
	}
	// Given a bytes.Buffer the decoder reads from it without copying.
	d := &strictDecoder{tokens: jsontext.NewDecoder(bytes.NewBuffer(body))}
	if kind := d.tokens.PeekKind(); kind != '{' && kind != 0 {
		return refuse(engine.MalformedBody, "", "the body is "+kindName(kind)+"; send a JSON object")
	}
	if err := d.message(into.ProtoReflect()); err != nil {
		return err
	}
	if _, err := d.tokens.ReadToken(); !errors.Is(err, io.EOF) {
		return refuse(engine.MalformedBody, "", fmt.Sprintf("the body goes on after its end at byte %d; send one JSON object", d.tokens.InputOffset()))
	}
	return nil
}

func (d *strictDecoder) message(m protoreflect.Message) error {
	if _, err := d.read('{', "an object"); err != nil {
		return err
	}
	for {
		token, err := d.tokens.ReadToken()
		if err != nil {
			return d.malformed(err)
		}
		if token.Kind() == '}' {
			return nil
		}
		if err := d.member(m, token.String()); err != nil {
			return err
		}
	}
}

// member reads the value of the named field into m.
func (d *strictDecoder) member(m protoreflect.Message, name string) error {
	field := m.Descriptor().Fields().ByName(protoreflect.Name(name))
	if field == nil {
		return d.unknownField(m.Descriptor(), name)
	}
	d.path = append(d.path, name)
	defer func() { d.path = d.path[:len(d.path)-1] }()
	if d.tokens.PeekKind() == 'n' {
		if _, err := d.tokens.ReadToken(); err != nil {
			return d.malformed(err)
		}
		return nil
	}
	if oneof := field.ContainingOneof(); oneof != nil && m.WhichOneof(oneof) != nil {
		return d.invalid("stands beside %s; give one of the two", m.WhichOneof(oneof).Name())
	}
	if field.IsList() {
		return d.list(m.Mutable(field).List(), field)
	}
	if field.Message() != nil {
		return d.messageValue(m.Mutable(field).Message())
	}
	value, err := d.scalar(field)
	if err != nil {
		return err
	}
	m.Set(field, value)
	return nil
}

func (d *strictDecoder) list(list protoreflect.List, field protoreflect.FieldDescriptor) error {
	if _, err := d.read('[', "an array"); err != nil {
		return err
	}
	for d.tokens.PeekKind() != ']' {
		if list.Len() == engine.MaxBatchReadings {
			return d.tooMany(field)
		}
		d.path = append(d.path, "["+strconv.Itoa(list.Len())+"]")
		if err := d.element(list, field); err != nil {
			return err
		}
		d.path = d.path[:len(d.path)-1]
	}
	_, err := d.read(']', "an array")
	return err
}

// tooMany refuses a list that goes on. Only readings can be sent in several requests.
func (d *strictDecoder) tooMany(field protoreflect.FieldDescriptor) error {
	if field.Message() != (*leadlinev1.Reading)(nil).ProtoReflect().Descriptor() {
		return d.invalid("has more than %d elements; give fewer", engine.MaxBatchReadings)
	}
	return refuse(engine.BatchTooLarge, d.field(), fmt.Sprintf("%s has more than %d elements; send them in several requests", d.field(), engine.MaxBatchReadings))
}

func (d *strictDecoder) element(list protoreflect.List, field protoreflect.FieldDescriptor) error {
	if field.Message() != nil {
		return d.messageValue(list.AppendMutable().Message())
	}
	value, err := d.scalar(field)
	if err == nil {
		list.Append(value)
	}
	return err
}

// read reads the next token, which has to be of the given kind.
func (d *strictDecoder) read(kind jsontext.Kind, wanted string) (jsontext.Token, error) {
	if got := d.tokens.PeekKind(); got != kind && got != 0 {
		return jsontext.Token{}, d.invalid("is %s; give %s", kindName(got), wanted)
	}
	token, err := d.tokens.ReadToken()
	if err != nil {
		return jsontext.Token{}, d.malformed(err)
	}
	return token, nil
}

// field returns the path of the value being read, such as readings[17].value.
func (d *strictDecoder) field() string {
	var b strings.Builder
	for i, step := range d.path {
		if i > 0 && !strings.HasPrefix(step, "[") {
			b.WriteByte('.')
		}
		b.WriteString(step)
	}
	return b.String()
}

func (d *strictDecoder) invalid(format string, args ...any) error {
	field := d.field()
	return refuse(engine.InvalidField, field, field+" "+fmt.Sprintf(format, args...))
}

func (d *strictDecoder) unknownField(message protoreflect.MessageDescriptor, name string) error {
	fields := message.Fields()
	known := make([]string, fields.Len())
	for i := range known {
		known[i] = string(fields.Get(i).Name())
	}
	d.path = append(d.path, shorten(name))
	field := d.field()
	remedy := "; known here: " + strings.Join(known, ", ")
	if len(known) == 0 {
		remedy = "; leave it out, nothing can be set here"
	}
	if alias := fields.ByJSONName(name); alias != nil {
		remedy = "; it is written " + string(alias.Name())
	}
	return refuse(engine.UnknownField, field, fmt.Sprintf("%q is not a field%s", field, remedy))
}

// malformed explains a body that isn't JSON, or uses a name twice.
func (d *strictDecoder) malformed(err error) error {
	var syntax *jsontext.SyntacticError
	switch {
	case errors.Is(err, jsontext.ErrDuplicateName):
		return refuse(engine.MalformedBody, d.field(), fmt.Sprintf("the body uses a name twice in one object, before byte %d; send each once", d.tokens.InputOffset()))
	case errors.Is(err, io.EOF), errors.Is(err, io.ErrUnexpectedEOF):
		return refuse(engine.MalformedBody, d.field(), "the body ends in the middle; send the whole JSON object")
	case errors.As(err, &syntax):
		return refuse(engine.MalformedBody, d.field(), fmt.Sprintf("the body is not JSON at byte %d: %s; correct it",
			syntax.ByteOffset, strings.TrimPrefix(syntax.Err.Error(), "jsontext: ")))
	}
	return refuse(engine.MalformedBody, d.field(), "the body is not JSON; send one JSON object")
}

func kindName(kind jsontext.Kind) string {
	switch kind {
	case 'n':
		return "null"
	case 't', 'f':
		return "a boolean"
	case '"':
		return "a string"
	case '0':
		return "a number"
	case '{':
		return "an object"
	case '[':
		return "an array"
	}
	return "no value"
}

// shorten keeps what a client sent from filling the answer.
func shorten(s string) string {
	const most = 60
	if len(s) <= most {
		return s
	}
	return strings.ToValidUTF8(s[:most], "") + "..."
}
