package server

import (
	"fmt"
	"net/url"
	"slices"
	"strings"

	"google.golang.org/protobuf/reflect/protoreflect"
	"google.golang.org/protobuf/types/known/durationpb"
	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
)

// checkQuery refuses parameters that the route doesn't know, that come twice or
// that can't be read, where the gateway would drop or reinterpret them. It
// returns the query without its empty parameters, which mean absent.
func (r *route) checkQuery(raw string) (string, error) {
	if raw == "" {
		return "", nil
	}
	values, err := url.ParseQuery(raw)
	if err != nil {
		return "", refuse(engine.UnknownParameter, "", "the query can't be read; write it as name=value&name=value, with special characters as %XX")
	}
	names := make([]string, 0, len(values))
	for name := range values {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		if err := r.checkParameter(name, values[name]); err != nil {
			return "", err
		}
		if values.Get(name) == "" {
			delete(values, name)
		}
	}
	return values.Encode(), nil
}

func (r *route) checkParameter(name string, values []string) error {
	field := r.parameter(name)
	if field == nil {
		return r.unknownParameter(name)
	}
	if len(values) > 1 {
		return refuse(engine.InvalidField, name, name+" is given more than once; give it once")
	}
	value := values[0]
	if value == "" {
		return nil
	}
	if remedy := parseParameter(field, value); remedy != "" {
		return refuse(engine.InvalidField, name, fmt.Sprintf("%s is %q; %s", name, shorten(value), remedy))
	}
	return nil
}

// parseParameter returns what to do about a text that it can't read.
func parseParameter(field protoreflect.FieldDescriptor, text string) (remedy string) {
	if field.Message() == nil {
		_, remedy = parseScalar(field, text)
		return remedy
	}
	switch field.Message().FullName() {
	case timeName:
		if _, ok := parseTime([]byte(text)); !ok {
			return "give an RFC 3339 time with its zone, such as 2026-03-01T12:00:00Z, + written as %2B"
		}
	case durationName:
		d := new(durationpb.Duration)
		if parseDuration(text, d) != nil {
			return "give a duration in seconds such as 86400s"
		}
		if _, err := durationOf("", d); err != nil { // which the gateway can't read either
			return "give a duration of at most 292 years, in seconds such as 86400s"
		}
	}
	return ""
}

// The messages that a query may hold.
var (
	timeName     = (*timestamppb.Timestamp)(nil).ProtoReflect().Descriptor().FullName()
	durationName = (*durationpb.Duration)(nil).ProtoReflect().Descriptor().FullName()
)

func (r *route) parameter(name string) protoreflect.FieldDescriptor {
	for _, field := range r.parameters() {
		if string(field.Name()) == name && (field.Message() == nil || field.Message().FullName() == timeName || field.Message().FullName() == durationName) {
			return field
		}
	}
	return nil
}

func (r *route) unknownParameter(name string) error {
	var known []string
	for _, field := range r.parameters() {
		known = append(known, string(field.Name()))
	}
	remedy := "leave it out, there are none here"
	if len(known) > 0 {
		remedy = "known here: " + strings.Join(known, ", ")
	}
	return refuse(engine.UnknownParameter, shorten(name), fmt.Sprintf("%q is not a parameter of %s %s; %s", shorten(name), r.method, r.template, remedy))
}
