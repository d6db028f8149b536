package server

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net/http"
	"net/url"
	"os"
	"slices"
	"strconv"
	"strings"

	"github.com/grpc-ecosystem/grpc-gateway/v2/runtime"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/reflect/protoreflect"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// maxBodyBytes bounds a request's body, and a gRPC message.
const maxBodyBytes = 4 << 20

// rest serves the HTTP interface. It finds the route, checks path, query,
// headers and body, and then lets the gateway call the service in this process,
// or, where the gateway is too slow or has no streams, a handler written by
// hand. What the gateway would tolerate or reinterpret never reaches it.
type rest struct {
	routes  []route
	gateway *runtime.ServeMux
	special map[string]specialHandler // by method and template
	pages   map[string]http.Handler   // by path: what isn't the API itself
	origins *origins
	logger  *slog.Logger
}

// specialHandler serves a route by hand. value is that of the path's variable.
type specialHandler func(w http.ResponseWriter, r *http.Request, value string) error

func newREST(ctx context.Context, s *services, o *origins, logger *slog.Logger) (*rest, error) {
	h := &rest{routes: readRoutes(), origins: o, logger: logger}
	h.gateway = runtime.NewServeMux(
		runtime.WithMarshalerOption(runtime.MIMEWildcard, jsonCodec{}),
		runtime.WithMarshalerOption(mediaJSON, jsonCodec{}),
		runtime.WithMarshalerOption(mediaText, textCodec{}),
		runtime.WithUnescapingMode(runtime.UnescapingModeAllExceptSlash),
		runtime.WithDisablePathLengthFallback(),
		runtime.WithDisableHTTPMethodOverride(),
		runtime.WithWriteContentLength(),
		runtime.WithIncomingHeaderMatcher(forwardedHeader),
		runtime.WithForwardResponseOption(writeETag),
		runtime.WithForwardResponseRewriter(chooseWords),
		runtime.WithErrorHandler(func(_ context.Context, _ *runtime.ServeMux, _ runtime.Marshaler, w http.ResponseWriter, r *http.Request, err error) {
			h.fail(w, r, err)
		}),
		runtime.WithRoutingErrorHandler(func(_ context.Context, _ *runtime.ServeMux, _ runtime.Marshaler, w http.ResponseWriter, r *http.Request, _ int) {
			h.fail(w, r, noSuchPath(r))
		}),
	)
	return h, errors.Join(
		leadlinev1.RegisterQuantityServiceHandlerServer(ctx, h.gateway, s.quantities),
		leadlinev1.RegisterInstrumentServiceHandlerServer(ctx, h.gateway, s.instruments),
		leadlinev1.RegisterReadingServiceHandlerServer(ctx, h.gateway, s.readings),
		leadlinev1.RegisterBeliefServiceHandlerServer(ctx, h.gateway, s.beliefs),
	)
}

// ServeHTTP answers one request. If it panics after the answer has begun, the
// connection is broken off, so that nobody takes the answer for whole.
func (h *rest) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	if r.ContentLength != 0 {
		arrivalOf(r).begin()
	}
	answer := &startedWriter{ResponseWriter: w}
	err := recovered(func() error { return h.serve(answer, r) })
	switch {
	case err != nil && answer.started:
		h.logger.Error("answer was broken off", "method", r.Method, "path", r.URL.Path, "error", err)
		panic(http.ErrAbortHandler)
	case err != nil:
		if isPanic(err) {
			clear(w.Header()) // of the answer that never was
		}
		h.fail(w, r, err)
	}
}

func (h *rest) serve(w http.ResponseWriter, r *http.Request) error {
	if err := h.origins.check(r); err != nil {
		return err
	}
	if page, ok := h.pages[r.URL.Path]; ok {
		return servePage(w, r, page)
	}
	return h.serveRoute(w, r)
}

// servePage serves what is only read.
func servePage(w http.ResponseWriter, r *http.Request, page http.Handler) error {
	if r.Method != http.MethodGet && r.Method != http.MethodHead {
		return wrongMethod(r, http.MethodGet, http.MethodHead)
	}
	page.ServeHTTP(w, r)
	return nil
}

func (h *rest) serveRoute(w http.ResponseWriter, r *http.Request) error {
	route, value, err := h.find(r)
	if err != nil {
		return err
	}
	if route.variable != "" {
		if err := engine.CheckID(route.variable, value); err != nil {
			return err
		}
	}
	query, err := route.checkQuery(r.URL.RawQuery)
	if err != nil {
		return err
	}
	if special, ok := h.special[route.method+" "+route.template]; ok {
		return special(w, r, value)
	}
	media, err := answerMedia(r)
	if err != nil {
		return err
	}
	request, err := route.prepare(w, r, value, query, media)
	if err != nil {
		return err
	}
	h.gateway.ServeHTTP(w, request)
	return nil
}

// find returns the route of a request and the value of its variable.
func (h *rest) find(r *http.Request) (*route, string, error) {
	path, ok := splitPath(r.URL.EscapedPath())
	if !ok {
		return nil, "", noSuchPath(r)
	}
	method := r.Method
	if method == http.MethodHead {
		method = http.MethodGet // net/http leaves the body out
	}
	var allowed []string
	for i := range h.routes {
		value, ok := h.routes[i].match(path)
		switch {
		case !ok:
			continue
		case h.routes[i].method == method:
			return &h.routes[i], value, nil
		}
		allowed = append(allowed, h.routes[i].method)
	}
	if allowed == nil {
		return nil, "", noSuchPath(r)
	}
	return nil, "", wrongMethod(r, allowed...)
}

// prepare returns the request that the gateway gets: one method, one spelling
// of the path, a checked query, a decoded body, one media type, and of the
// headers only those that a service reads.
func (r *route) prepare(w http.ResponseWriter, in *http.Request, value, query, media string) (*http.Request, error) {
	ctx := in.Context()
	if media == mediaText {
		ctx = withWords(ctx)
	}
	out := (&http.Request{Method: r.method, URL: new(url.URL), Header: gatewayHeader(in.Header, media), Body: http.NoBody}).WithContext(ctx)
	out.URL.Path, out.URL.RawPath = r.path(value)
	out.URL.RawQuery = query
	if r.body == "" {
		return out, nil
	}
	body, err := readBody(w, in, nil)
	if err != nil {
		return nil, err
	}
	message, mayBeEmpty := r.bodyMessage()
	if err := decodeStrict(body, message, mayBeEmpty); err != nil {
		return nil, err
	}
	if err := r.checkVariable(message, value); err != nil {
		return nil, err
	}
	out.Body = &decodedBody{ReadCloser: http.NoBody, message: message}
	return out, nil
}

// checkVariable refuses a body that gives the variable of the path another
// value, which the gateway would overwrite.
func (r *route) checkVariable(body proto.Message, value string) error {
	if r.body != "*" || r.variable == "" {
		return nil
	}
	m := body.ProtoReflect()
	sent := m.Get(m.Descriptor().Fields().ByName(protoreflect.Name(r.variable))).String()
	if sent == "" || sent == value {
		return nil
	}
	return refuse(engine.InvalidField, r.variable, fmt.Sprintf("%s is %q, not the %q of the path; leave it out", r.variable, shorten(sent), value))
}

// readBody reads a body of admissible length, appending it to into. When the
// service stops, a body still arriving is cut.
func readBody(w http.ResponseWriter, r *http.Request, into []byte) ([]byte, error) {
	body, err := readWhole(w, r, into)
	if stopping := arrivalOf(r).end(err == nil); stopping != nil {
		return nil, stopping
	}
	return body, err
}

func readWhole(w http.ResponseWriter, r *http.Request, into []byte) ([]byte, error) {
	// MaxBytesReader has net/http close the connection, if it knows the writer.
	if s, ok := w.(*startedWriter); ok {
		w = s.ResponseWriter
	}
	if r.ContentLength > maxBodyBytes {
		return nil, bodyTooLarge()
	}
	if n := int(r.ContentLength) + 1; n > cap(into) {
		into = make([]byte, 0, n)
	}
	limited := http.MaxBytesReader(w, r.Body, maxBodyBytes)
	for {
		if len(into) == cap(into) {
			into = slices.Grow(into, max(512, len(into)))
		}
		n, err := limited.Read(into[len(into):cap(into)])
		into = into[:len(into)+n]
		switch {
		case errors.Is(err, io.EOF):
			return into, nil
		case err != nil:
			return nil, bodyError(err)
		}
	}
}

func bodyTooLarge() error {
	return refuse(engine.BodyTooLarge, "", fmt.Sprintf("the body is larger than %d bytes; send the readings in several requests", maxBodyBytes))
}

func bodyError(err error) error {
	var tooLarge *http.MaxBytesError
	switch {
	case errors.As(err, &tooLarge):
		return bodyTooLarge()
	case errors.Is(err, os.ErrDeadlineExceeded):
		return &httpError{
			refused: refuse(engine.MalformedBody, "", "the body did not arrive in time; send it without pauses"),
			http:    http.StatusRequestTimeout,
		}
	}
	return refuse(engine.MalformedBody, "", "the body ended before its announced length; send all of it")
}

// answerMedia chooses the media type of an answer of the API.
func answerMedia(r *http.Request) (string, error) {
	media := negotiate(r.Header, mediaJSON, mediaText)
	if media == "" {
		return "", notAcceptable(mediaJSON, mediaText)
	}
	return media, nil
}

func noSuchPath(r *http.Request) error {
	return refuse(engine.NotFound, "", fmt.Sprintf("there is nothing at %q; see /openapi.json for the paths, and write a slash within an ID as %%2F", shorten(r.URL.EscapedPath())))
}

func wrongMethod(r *http.Request, allowed ...string) error {
	if slices.Contains(allowed, http.MethodGet) && !slices.Contains(allowed, http.MethodHead) {
		allowed = append(allowed, http.MethodHead)
	}
	slices.Sort(allowed)
	allow := strings.Join(allowed, ", ")
	return &httpError{
		refused: refuse(engine.NotSupported, "", fmt.Sprintf("%s is no method of this path; use %s", shorten(r.Method), allow)),
		http:    http.StatusMethodNotAllowed,
		allow:   allow,
	}
}

// fail answers with an error, in the media type that the request asked for, and
// JSON if it asked for neither. A fault is logged, here and nowhere else.
func (h *rest) fail(w http.ResponseWriter, r *http.Request, err error) {
	f := failureOf(err)
	if f.fault {
		h.logger.Error("request failed", "method", r.Method, "path", r.URL.Path, "error", err)
	}
	body, contentType := errorBody(negotiate(r.Header, mediaJSON, mediaText), f)
	header := w.Header()
	header.Set("Content-Type", contentType)
	header.Set("Content-Length", strconv.Itoa(len(body)))
	var special *httpError
	if errors.As(err, &special) && special.allow != "" {
		header.Set("Allow", special.allow)
	}
	if f.retry > 0 {
		header.Set("Retry-After", strconv.Itoa(int(f.retry.Seconds())))
	}
	w.WriteHeader(f.http)
	_, _ = w.Write(body) // a client that is gone can't be told
}
