package server

import (
	"net/http"
	"net/url"
	"slices"
	"strings"

	"google.golang.org/genproto/googleapis/api/annotations"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/reflect/protoreflect"
	"google.golang.org/protobuf/reflect/protoregistry"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// route is one HTTP binding of a method, read from the annotations of the
// .proto files, so that what is checked here can't drift from what the gateway
// serves.
type route struct {
	method   string
	template string   // for example /v1/quantities/{id}
	segments []string // of the template
	variable string   // name of the request's field in the path, or empty
	body     string   // name of the request's field in the body, "*" for all of it, or empty
	request  protoreflect.MessageType
}

// readRoutes lists every HTTP binding of the interface.
func readRoutes() []route {
	var routes []route
	for _, file := range []protoreflect.FileDescriptor{
		leadlinev1.File_leadline_v1_quantity_proto,
		leadlinev1.File_leadline_v1_instrument_proto,
		leadlinev1.File_leadline_v1_reading_proto,
		leadlinev1.File_leadline_v1_belief_proto,
	} {
		for i := range file.Services().Len() {
			methods := file.Services().Get(i).Methods()
			for j := range methods.Len() {
				routes = append(routes, routesOf(methods.Get(j))...)
			}
		}
	}
	return routes
}

func routesOf(method protoreflect.MethodDescriptor) []route {
	rule, ok := proto.GetExtension(method.Options(), annotations.E_Http).(*annotations.HttpRule)
	if !ok || rule == nil {
		return nil
	}
	request, err := protoregistry.GlobalTypes.FindMessageByName(method.Input().FullName())
	if err != nil { // generated code registers its messages before main
		panic(err)
	}
	routes := []route{routeOf(rule, request)}
	for _, more := range rule.GetAdditionalBindings() {
		routes = append(routes, routeOf(more, request))
	}
	return routes
}

func routeOf(rule *annotations.HttpRule, request protoreflect.MessageType) route {
	r := route{body: rule.GetBody(), request: request}
	switch pattern := rule.GetPattern().(type) {
	case *annotations.HttpRule_Get:
		r.method, r.template = http.MethodGet, pattern.Get
	case *annotations.HttpRule_Put:
		r.method, r.template = http.MethodPut, pattern.Put
	case *annotations.HttpRule_Post:
		r.method, r.template = http.MethodPost, pattern.Post
	case *annotations.HttpRule_Delete:
		r.method, r.template = http.MethodDelete, pattern.Delete
	}
	r.segments = strings.Split(r.template, "/")
	for _, segment := range r.segments {
		if name, _, ok := variableOf(segment); ok {
			r.variable = name
		}
	}
	return r
}

// variableOf returns the name in a segment such as {id} or {id}:renew, and what
// follows it.
func variableOf(segment string) (name, verb string, ok bool) {
	name, verb, ok = strings.Cut(strings.TrimPrefix(segment, "{"), "}")
	return name, verb, ok && strings.HasPrefix(segment, "{")
}

// match compares the route with the segments of a path, each unescaped by
// itself, and returns the value of its variable. A verb is the last of what an
// ID with colons may end in: of x:renew:renew it is the second.
func (r *route) match(path []string) (value string, ok bool) {
	if len(path) != len(r.segments) {
		return "", false
	}
	for i, segment := range r.segments {
		if _, verb, variable := variableOf(segment); variable {
			value, ok = strings.CutSuffix(path[i], verb)
			if !ok || value == "" {
				return "", false
			}
		} else if segment != path[i] {
			return "", false
		}
	}
	return value, true
}

// path returns the route's path for a value of its variable, escaped so that a
// slash within the value stays apart from those of the path.
func (r *route) path(value string) (plain, escaped string) {
	plainSegments, escapedSegments := slices.Clone(r.segments), slices.Clone(r.segments)
	for i, segment := range r.segments {
		if _, verb, variable := variableOf(segment); variable {
			plainSegments[i], escapedSegments[i] = value+verb, url.PathEscape(value)+verb
		}
	}
	return strings.Join(plainSegments, "/"), strings.Join(escapedSegments, "/")
}

// splitPath unescapes the segments of an escaped path one by one, so that %2F
// is no separator and ":" and "%3A" are the same.
func splitPath(escaped string) ([]string, bool) {
	segments := strings.Split(escaped, "/")
	for i, segment := range segments {
		plain, err := url.PathUnescape(segment)
		if err != nil {
			return nil, false
		}
		segments[i] = plain
	}
	return segments, true
}

// parameters lists the fields of the request that a query may set.
func (r *route) parameters() []protoreflect.FieldDescriptor {
	if r.body == "*" {
		return nil
	}
	var fields []protoreflect.FieldDescriptor
	all := r.request.Descriptor().Fields()
	for i := range all.Len() {
		field := all.Get(i)
		if name := string(field.Name()); name != r.variable && name != r.body {
			fields = append(fields, field)
		}
	}
	return fields
}

// bodyMessage returns an empty message for the body, and whether the body may
// be empty because the message has no field but what the path already gives.
func (r *route) bodyMessage() (message proto.Message, mayBeEmpty bool) {
	descriptor := r.request.Descriptor()
	if r.body == "*" {
		fields := descriptor.Fields()
		return newMessage(r.request), fields.Len() == 0 || fields.Len() == 1 && string(fields.Get(0).Name()) == r.variable
	}
	field := descriptor.Fields().ByName(protoreflect.Name(r.body))
	return r.request.New().NewField(field).Message().Interface(), false
}
