package server

import (
	"math"
	"strconv"
	"strings"

	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/reflect/protoreflect"
	"google.golang.org/protobuf/types/known/durationpb"
	"google.golang.org/protobuf/types/known/timestamppb"
)

// messageValue reads an object, or the string that stands for a time or a
// duration.
func (d *strictDecoder) messageValue(m protoreflect.Message) error {
	switch into := m.Interface().(type) {
	case *timestamppb.Timestamp:
		token, err := d.read('"', `a time such as "2026-03-01T12:00:00Z"`)
		if err != nil {
			return err
		}
		return d.time(token.String(), into)
	case *durationpb.Duration:
		token, err := d.read('"', `a duration such as "86400s"`)
		if err != nil {
			return err
		}
		return d.duration(token.String(), into)
	}
	return d.message(m)
}

func (d *strictDecoder) time(text string, into *timestamppb.Timestamp) error {
	t, ok := parseTime([]byte(text))
	if !ok {
		return d.invalid("is %q; give an RFC 3339 time with its zone, such as \"2026-03-01T12:00:00Z\" or \"2026-03-01T13:00:00+01:00\"", shorten(text))
	}
	into.Seconds, into.Nanos = t.Unix(), int32(t.Nanosecond())
	return nil
}

func (d *strictDecoder) duration(text string, into *durationpb.Duration) error {
	if parseDuration(text, into) != nil {
		return d.invalid("is %q; give a duration in seconds such as \"86400s\"", shorten(text))
	}
	return nil
}

// parseDuration reads a duration as protobuf's JSON has it.
func parseDuration(text string, into *durationpb.Duration) error {
	if strings.Trim(text, "-.0123456789s") != "" {
		return strconv.ErrSyntax
	}
	return protojson.Unmarshal([]byte(`"`+text+`"`), into)
}

// scalar reads a value of a field that isn't a message.
func (d *strictDecoder) scalar(field protoreflect.FieldDescriptor) (protoreflect.Value, error) {
	switch field.Kind() {
	case protoreflect.DoubleKind, protoreflect.Int32Kind, protoreflect.Uint32Kind:
		token, err := d.read('0', "a number")
		if err != nil {
			return protoreflect.Value{}, err
		}
		return d.parsed(field, token.String())
	case protoreflect.BoolKind:
		if kind := d.tokens.PeekKind(); kind != 't' && kind != 'f' && kind != 0 {
			return protoreflect.Value{}, d.invalid("is %s; give true or false", kindName(kind))
		}
		token, err := d.tokens.ReadToken()
		if err != nil {
			return protoreflect.Value{}, d.malformed(err)
		}
		return protoreflect.ValueOfBool(token.Bool()), nil
	}
	token, err := d.read('"', "a string")
	if err != nil {
		return protoreflect.Value{}, err
	}
	return d.parsed(field, token.String())
}

func (d *strictDecoder) parsed(field protoreflect.FieldDescriptor, text string) (protoreflect.Value, error) {
	value, remedy := parseScalar(field, text)
	if remedy != "" {
		return protoreflect.Value{}, d.invalid("is %s; %s", shorten(text), remedy)
	}
	return value, nil
}

// parseScalar reads the text of a number, string, boolean or enum, in a body or
// in a query. It returns what to do about a text that it can't read.
func parseScalar(field protoreflect.FieldDescriptor, text string) (value protoreflect.Value, remedy string) {
	switch field.Kind() {
	case protoreflect.StringKind:
		return protoreflect.ValueOfString(text), ""
	case protoreflect.DoubleKind:
		x, ok := parseNumber(text)
		if !ok {
			return value, "give a decimal number that 64 bits hold, such as 0.8 or 1e-3"
		}
		return protoreflect.ValueOfFloat64(x), ""
	case protoreflect.Int32Kind:
		i, err := strconv.ParseInt(text, 10, 32)
		if err != nil || text[0] == '+' {
			return value, "give a whole number"
		}
		return protoreflect.ValueOfInt32(int32(i)), ""
	case protoreflect.Uint32Kind:
		i, err := strconv.ParseUint(text, 10, 32)
		if err != nil {
			return value, "give a whole number, 0 or above"
		}
		return protoreflect.ValueOfUint32(uint32(i)), ""
	case protoreflect.Uint64Kind:
		i, err := strconv.ParseUint(text, 10, 64)
		if err != nil {
			return value, "give a whole number, 0 or above, as a string"
		}
		return protoreflect.ValueOfUint64(i), ""
	case protoreflect.BoolKind:
		if text != "true" && text != "false" {
			return value, "give true or false"
		}
		return protoreflect.ValueOfBool(text == "true"), ""
	case protoreflect.EnumKind:
		return parseEnum(field.Enum(), text)
	}
	return value, "leave it out; it can't be given here"
}

func parseEnum(enum protoreflect.EnumDescriptor, text string) (value protoreflect.Value, remedy string) {
	if v := enum.Values().ByName(protoreflect.Name(text)); v != nil && v.Number() != 0 {
		return protoreflect.ValueOfEnum(v.Number()), ""
	}
	var words []string
	for i := range enum.Values().Len() {
		if v := enum.Values().Get(i); v.Number() != 0 {
			words = append(words, string(v.Name()))
		}
	}
	return value, "give one of " + strings.Join(words, ", ")
}

// parseNumber reads a JSON number (RFC 8259, section 6). A number other than 0
// that 64 bits would turn into 0 or infinity is none.
func parseNumber(text string) (float64, bool) {
	end, zero := scanNumber(text)
	if end != len(text) || end == 0 {
		return 0, false
	}
	x, err := strconv.ParseFloat(text, 64)
	if err != nil || math.IsInf(x, 0) || x == 0 && !zero {
		return 0, false
	}
	return x, true
}

// scanNumber returns the length of the JSON number at the start of text, 0 if
// there is none, and whether all digits before its exponent are 0.
func scanNumber[T string | []byte](text T) (end int, zero bool) {
	i := 0
	if i < len(text) && text[i] == '-' {
		i++
	}
	zero = true
	digits := func() int {
		start := i
		for i < len(text) && text[i] >= '0' && text[i] <= '9' {
			zero = zero && text[i] == '0'
			i++
		}
		return i - start
	}
	first := i
	if n := digits(); n == 0 || n > 1 && text[first] == '0' {
		return 0, false
	}
	if i < len(text) && text[i] == '.' {
		i++
		if digits() == 0 {
			return 0, false
		}
	}
	mantissaZero := zero
	if i < len(text) && (text[i] == 'e' || text[i] == 'E') {
		i++
		if i < len(text) && (text[i] == '+' || text[i] == '-') {
			i++
		}
		if digits() == 0 {
			return 0, false
		}
	}
	return i, mantissaZero
}

// newMessage returns an empty message of the type that a route takes.
func newMessage(m protoreflect.MessageType) proto.Message { return m.New().Interface() }
