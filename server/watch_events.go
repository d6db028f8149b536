package server

import (
	"log/slog"
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
// "belief" or "retired", and as its data the message of the gRPC stream; the
// last one may be an "error", with a google.rpc.Status.
type eventWriter struct {
	http.ResponseWriter
	control *http.ResponseController
	stall   time.Duration
	last    time.Time
	gone    bool // the client, so that nothing more can be written
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
	if events.write(": beliefs, then their changes\n\n") != nil || r.Method == http.MethodHead {
		return nil
	}
	err := watch.run(r.Context(), events.send, events.idle)
	if !events.gone && r.Context().Err() == nil {
		events.fail(s.logger, err)
	}
	return nil
}

// fail tells why a watch ends, as an answer that has begun can't become an
// error. A fault is logged.
func (e *eventWriter) fail(logger *slog.Logger, err error) {
	f := failureOf(err)
	if f.fault {
		logger.Error("watch failed", "error", err)
	}
	body, _ := errorBody(mediaJSON, f)
	_ = e.write("event: error\ndata: " + strings.TrimSuffix(string(body), "\n") + "\n\n") // or the client is gone
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
	_, err := e.ResponseWriter.Write([]byte(text))
	if err == nil {
		err = e.control.Flush()
	}
	e.gone = e.gone || err != nil
	return err
}
