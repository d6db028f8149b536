package server

import (
	"net/http"
	"strings"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// eventPause is after how long without events a comment is sent, which keeps
// the connection open on its way through proxies (the figure of the HTML
// standard, 9.2.7).
const eventPause = 15 * time.Second

// eventWriter writes server-sent events (HTML standard, 9.2). Each has a type,
// "belief" or "retired", and as its data the message of the gRPC stream.
type eventWriter struct {
	http.ResponseWriter
	control *http.ResponseController
	stall   time.Duration
	last    time.Time
}

// watchBeliefs serves GET /v1/beliefs:watch.
func (s *beliefService) watchBeliefs(w http.ResponseWriter, r *http.Request, _ string) error {
	if negotiate(r.Header, mediaEvent) == "" {
		return notAcceptable(mediaEvent)
	}
	prefix := r.URL.Query().Get("prefix")
	if err := checkPrefix(prefix); err != nil {
		return err
	}
	watch := s.newWatch(prefix)
	events := &eventWriter{ResponseWriter: w, control: http.NewResponseController(w), stall: watch.stall}
	// The server's deadline is for reading a request; this one was read.
	_ = events.control.SetReadDeadline(time.Time{})
	w.Header().Set("Content-Type", mediaEvent)
	w.Header().Set("Cache-Control", "no-store")
	// An answer that has begun can't become an error: whatever ends it, the
	// client sees the end and watches again.
	if events.write(": beliefs, then their changes\n\n") == nil && r.Method != http.MethodHead {
		_ = watch.run(r.Context(), events.send, events.idle)
	}
	return nil
}

func (e *eventWriter) send(event *leadlinev1.WatchBeliefsResponse) error {
	kind := "belief"
	if event.GetBelief() == nil {
		kind = "retired"
	}
	data, err := marshalJSON(event)
	if err != nil {
		return err
	}
	return e.write("event: " + kind + "\ndata: " + strings.TrimSuffix(string(data), "\n") + "\n\n")
}

// idle keeps a silent connection open.
func (e *eventWriter) idle() error {
	if time.Since(e.last) < eventPause {
		return nil
	}
	return e.write(":\n\n")
}

// write sends text at once; a client that doesn't take it in time is cut.
func (e *eventWriter) write(text string) error {
	e.last = time.Now()
	// Writers without deadlines, such as recorders in tests, are served without.
	_ = e.control.SetWriteDeadline(e.last.Add(e.stall))
	if _, err := e.ResponseWriter.Write([]byte(text)); err != nil {
		return err
	}
	return e.control.Flush()
}
