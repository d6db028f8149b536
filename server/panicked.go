package server

import (
	"errors"
	"fmt"
	"net/http"
	"runtime/debug"
)

// panicked is a panic turned into an error: a fault, answered as INTERNAL and
// logged with the stack.
type panicked struct {
	value any
	stack []byte
}

func (p *panicked) Error() string { return fmt.Sprintf("panic: %v\n%s", p.value, p.stack) }

// recovered runs f and returns its panic as an error, so that one request with
// which the service can't cope doesn't end all the others. Goroutines of a
// request need it too, as a panic there ends the process. What net/http has for
// breaking off an answer passes.
func recovered(f func() error) (err error) {
	defer func() {
		switch v := recover(); {
		case v == nil:
		case v == http.ErrAbortHandler:
			panic(v)
		default:
			err = &panicked{v, debug.Stack()}
		}
	}()
	return f()
}

// startedWriter knows whether an answer has begun, and so can't become an error.
type startedWriter struct {
	http.ResponseWriter
	started bool
}

// Write implements http.ResponseWriter.
func (w *startedWriter) Write(p []byte) (int, error) {
	w.started = true
	return w.ResponseWriter.Write(p)
}

// WriteHeader implements http.ResponseWriter.
func (w *startedWriter) WriteHeader(code int) {
	w.started = true
	w.ResponseWriter.WriteHeader(code)
}

// Unwrap lets http.ResponseController reach deadlines and Flush.
func (w *startedWriter) Unwrap() http.ResponseWriter { return w.ResponseWriter }

// isPanic tells whether err is a panic.
func isPanic(err error) bool {
	var p *panicked
	return errors.As(err, &p)
}
