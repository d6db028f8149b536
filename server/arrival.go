package server

import (
	"context"
	"net"
	"net/http"
	"sync"
	"time"

	"leadline.example/engine"
)

// arrivals are the connections on which the body of a request is arriving. When
// the service stops they are cut: nothing of such a request was taken, while
// waiting for one whose client pauses would hold up the stop. It has to be the
// connection's read deadline, as net/http itself reads what a handler left; and
// it may be set only until a body is complete, as from then on net/http takes a
// failed read for a client who is gone, and cancels the request.
type arrivals struct {
	mu      sync.Mutex // guards the rest
	stopped bool
	conns   map[net.Conn]struct{}
}

func newArrivals() *arrivals { return &arrivals{conns: map[net.Conn]struct{}{}} }

// arrival is one connection's place among them.
type arrival struct {
	all  *arrivals
	conn net.Conn
}

type arrivalKey struct{}

// inContext is http.Server.ConnContext.
func (a *arrivals) inContext(ctx context.Context, c net.Conn) context.Context {
	return context.WithValue(ctx, arrivalKey{}, &arrival{a, c})
}

// follow is http.Server.ConnState: a connection that is done with a request is
// done with its body.
func (a *arrivals) follow(c net.Conn, state http.ConnState) {
	if state != http.StateIdle && state != http.StateClosed && state != http.StateHijacked {
		return
	}
	a.mu.Lock()
	defer a.mu.Unlock()
	delete(a.conns, c)
}

// cut ends the requests whose bodies are arriving, and those that come later.
func (a *arrivals) cut() {
	a.mu.Lock()
	defer a.mu.Unlock()
	a.stopped = true
	for c := range a.conns {
		_ = c.SetReadDeadline(time.Unix(1, 0)) // or it is closed already
	}
}

// arrivalOf returns that of the request's connection; nil without a server of
// ours, as in benchmarks.
func arrivalOf(r *http.Request) *arrival {
	a, _ := r.Context().Value(arrivalKey{}).(*arrival)
	return a
}

// begin takes note of a request with a body.
func (a *arrival) begin() {
	if a == nil {
		return
	}
	a.all.mu.Lock()
	defer a.all.mu.Unlock()
	a.all.conns[a.conn] = struct{}{}
	if a.all.stopped {
		_ = a.conn.SetReadDeadline(time.Unix(1, 0)) // or it is closed already
	}
}

// end takes note that the reading of the body ended, and whether that was
// complete; else net/http will read on. It is an error if the service stopped
// before.
func (a *arrival) end(complete bool) error {
	if a == nil {
		return nil
	}
	a.all.mu.Lock()
	defer a.all.mu.Unlock()
	if a.all.stopped {
		return errRequestStopping
	}
	if complete {
		delete(a.all.conns, a.conn)
	}
	return nil
}

var errRequestStopping = &httpError{
	refused: refuse(engine.Overloaded, "", "the service is stopping and took nothing of this request; send it again in a moment"),
	http:    http.StatusServiceUnavailable,
}
