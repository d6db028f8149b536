package server_test

import (
	"bufio"
	"context"
	"fmt"
	"io"
	"net"
	"net/http"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
	"leadline.example/server"
)

// dialHTTP sends the beginning of a request and keeps the connection.
func (r *running) dialHTTP(text string) (net.Conn, *bufio.Reader) {
	r.t.Helper()
	conn, err := net.Dial("tcp", strings.TrimPrefix(r.url, "http://"))
	if err != nil {
		r.t.Fatal(err)
	}
	r.t.Cleanup(func() { _ = conn.Close() })
	if _, err := io.WriteString(conn, text); err != nil {
		r.t.Fatal(err)
	}
	return conn, bufio.NewReader(conn)
}

// A client that never finishes its body must not hold up the stop, nor make a
// failure of it. That the service is reading is known from its 100 Continue.
func TestStopCutsBodiesThatAreArriving(t *testing.T) {
	for _, path := range []string{"POST /v1/readings", "POST /v1/quantities/gap/readings", "PUT /v1/quantities/gap"} {
		t.Run(path, func(t *testing.T) {
			r := startServer(t)
			conn, answers := r.dialHTTP(path + " HTTP/1.1\r\nHost: localhost\r\nContent-Length: 100\r\nExpect: 100-continue\r\n\r\n")
			if line, err := answers.ReadString('\n'); err != nil || !strings.Contains(line, " 100 ") {
				t.Fatalf("%q, %v; want 100 Continue", line, err)
			}
			if _, err := answers.ReadString('\n'); err != nil {
				t.Fatal(err)
			}
			if _, err := io.WriteString(conn, `{"val`); err != nil {
				t.Fatal(err)
			}
			r.stop() // fails the test if Serve returns an error
			response, err := http.ReadResponse(answers, nil)
			if err != nil {
				t.Fatal(err)
			}
			body, err := io.ReadAll(response.Body)
			if err != nil {
				t.Fatal(err)
			}
			if response.Header.Get("Retry-After") == "" {
				t.Error("no Retry-After")
			}
			answer{t, response.StatusCode, response.Header, body}.wantProblem(503, engine.Overloaded, "")
			if log := r.log.String(); strings.Contains(log, "broken off") {
				t.Errorf("the stop waited for the body:\n%s", log)
			}
		})
	}
}

// net/http reads what a handler leaves of a body; that is cut as well.
func TestStopCutsBodiesThatNobodyReads(t *testing.T) {
	entered := make(chan struct{})
	r := startServerOn(t, filepath.Join(t.TempDir(), "ledger"), newClock(), func(o *server.Options) {
		o.Metrics = http.HandlerFunc(func(http.ResponseWriter, *http.Request) { close(entered) })
	})
	r.dialHTTP("GET /metrics HTTP/1.1\r\nHost: localhost\r\nContent-Length: 100\r\n\r\nx")
	<-entered
	r.stop()
	if log := r.log.String(); strings.Contains(log, "broken off") {
		t.Errorf("the stop waited for the body:\n%s", log)
	}
}

// blockedKeeper takes readings and never answers for them.
type blockedKeeper struct {
	server.ReadingKeeper
	entered chan struct{}
	release chan struct{}
}

func (k *blockedKeeper) Post(context.Context, engine.Batch) ([]engine.Result, error) {
	k.entered <- struct{}{}
	<-k.release
	return nil, context.Canceled
}

func (k *blockedKeeper) Submit(engine.Batch, func([]engine.Result, error)) error {
	k.entered <- struct{}{}
	return nil
}

// A batch of a stream that the keeper has not answered has an end too.
func TestStopEndsStreamsWithAnUnansweredBatch(t *testing.T) {
	k := &blockedKeeper{entered: make(chan struct{})}
	r := startServerOn(t, filepath.Join(t.TempDir(), "ledger"), newClock(), func(o *server.Options) {
		k.ReadingKeeper, o.Readings, o.DrainTime = o.Keeper, k, time.Millisecond
	})
	stream, err := r.readings.StreamReadings(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: 1, Readings: []*leadlinev1.Reading{reading("gap", 0.8, "")}}); err != nil {
		t.Fatal(err)
	}
	<-k.entered
	r.stop()
	if ack, err := stream.Recv(); err == nil {
		t.Errorf("the batch was acknowledged, though nobody answered for it: %v", ack)
	}
}

// What takes longer than the time to drain is broken off; that is in the log,
// but the stop is in order.
func TestStopBreaksOffWhatTakesTooLong(t *testing.T) {
	k := &blockedKeeper{entered: make(chan struct{}), release: make(chan struct{})}
	r := startServerOn(t, filepath.Join(t.TempDir(), "ledger"), newClock(), func(o *server.Options) {
		k.ReadingKeeper, o.Readings, o.DrainTime = o.Keeper, k, time.Millisecond
	})
	body := `{"readings":[{"quantity":"gap","value":1}]}`
	_, answers := r.dialHTTP(fmt.Sprintf("POST /v1/readings HTTP/1.1\r\nHost: localhost\r\nContent-Length: %d\r\n\r\n%s", len(body), body))
	<-k.entered
	r.stop()
	close(k.release)
	if _, err := http.ReadResponse(answers, nil); err == nil {
		t.Error("the request was answered although it was broken off")
	}
	if log := r.log.String(); !strings.Contains(log, "level=WARN") || !strings.Contains(log, "broken off") {
		t.Errorf("the log doesn't warn of the request broken off:\n%s", log)
	}
}
