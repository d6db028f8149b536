package server_test

import (
	"bytes"
	"context"
	"encoding/json"
	"io"
	"log/slog"
	"net"
	"net/http"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials/insecure"

	"leadline.example/engine"
	"leadline.example/persist"
	leadlinev1 "leadline.example/proto/leadline/v1"
	"leadline.example/server"
)

// noon is when the tests' clock starts.
var noon = time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)

// clock is a clock that tests move.
type clock struct{ nanos atomic.Int64 }

func newClock() *clock {
	c := new(clock)
	c.nanos.Store(noon.UnixNano())
	return c
}

func (c *clock) Now() time.Time          { return time.Unix(0, c.nanos.Load()) }
func (c *clock) Advance(d time.Duration) { c.nanos.Add(int64(d)) }

// running is a service on a ledger file, reached over the network as by any
// client.
type running struct {
	t           testing.TB
	clock       *clock
	file        string
	keeper      *engine.Keeper
	url         string
	log         *lockedBuffer
	quantities  leadlinev1.QuantityServiceClient
	instruments leadlinev1.InstrumentServiceClient
	readings    leadlinev1.ReadingServiceClient
	beliefs     leadlinev1.BeliefServiceClient
	conn        *grpc.ClientConn
	stop        func()
}

func startServer(t testing.TB) *running {
	t.Helper()
	return startServerOn(t, filepath.Join(t.TempDir(), "ledger"), newClock())
}

// startServerOn starts a service with options as change leaves them.
func startServerOn(t testing.TB, file string, c *clock, change ...func(*server.Options)) *running {
	t.Helper()
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		return persist.Open(persist.Options{Path: file, Now: c.Now})
	}})
	if err != nil {
		t.Fatal(err)
	}
	r := &running{t: t, clock: c, file: file, keeper: keeper, log: new(lockedBuffer)}
	o := server.Options{
		Keeper: keeper, Now: c.Now, Logger: slog.New(slog.NewTextHandler(r.log, nil)), Metrics: http.NotFoundHandler(),
	}
	for _, f := range change {
		f(&o)
	}
	s, err := server.New(o)
	if err != nil {
		t.Fatal(err)
	}
	web, rpc := listen(t), listen(t)
	r.url = "http://" + web.Addr().String()
	r.conn, err = grpc.NewClient(rpc.Addr().String(), grpc.WithTransportCredentials(insecure.NewCredentials()))
	if err != nil {
		t.Fatal(err)
	}
	r.quantities = leadlinev1.NewQuantityServiceClient(r.conn)
	r.instruments = leadlinev1.NewInstrumentServiceClient(r.conn)
	r.readings = leadlinev1.NewReadingServiceClient(r.conn)
	r.beliefs = leadlinev1.NewBeliefServiceClient(r.conn)

	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- s.Serve(ctx, web, rpc) }()
	var stopped bool
	r.stop = func() {
		if stopped {
			return
		}
		stopped = true
		cancel()
		if err := <-ended; err != nil {
			t.Errorf("Serve: %v", err)
		}
		if err := r.conn.Close(); err != nil {
			t.Error(err)
		}
		if err := keeper.Close(); err != nil {
			t.Error(err)
		}
	}
	t.Cleanup(r.stop)
	return r
}

func listen(t testing.TB) net.Listener {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// answer is what came back over HTTP.
type answer struct {
	t      testing.TB
	code   int
	header http.Header
	body   []byte
}

// call sends a request; header lists names and values in turn. The path is sent
// as it is spelled.
func (r *running) call(method, path, body string, header ...string) answer {
	r.t.Helper()
	request, err := http.NewRequestWithContext(r.t.Context(), method, r.url+path, strings.NewReader(body))
	if err != nil {
		r.t.Fatal(err)
	}
	for i := 0; i < len(header); i += 2 {
		if header[i] == "Host" {
			request.Host = header[i+1]
			continue
		}
		request.Header.Add(header[i], header[i+1])
	}
	response, err := http.DefaultClient.Do(request)
	if err != nil {
		r.t.Fatal(err)
	}
	defer response.Body.Close()
	text, err := io.ReadAll(response.Body)
	if err != nil {
		r.t.Fatal(err)
	}
	return answer{r.t, response.StatusCode, response.Header, text}
}

// want fails the test unless the answer has the code.
func (a answer) want(code int) answer {
	a.t.Helper()
	if a.code != code {
		a.t.Fatalf("status %d, want %d; body %s", a.code, code, a.body)
	}
	return a
}

// json returns the value at a path of names in the answer's JSON; nil if there
// is none.
func (a answer) json(path ...string) any {
	a.t.Helper()
	decoder := json.NewDecoder(bytes.NewReader(a.body))
	decoder.UseNumber()
	var value any
	if err := decoder.Decode(&value); err != nil {
		a.t.Fatalf("%v in %s", err, a.body)
	}
	for _, name := range path {
		object, _ := value.(map[string]any)
		value = object[name]
	}
	return value
}

// problem returns the reason and the field of an error's body.
func (a answer) problem() (reason, field string) {
	a.t.Helper()
	details, _ := a.json("details").([]any)
	for _, detail := range details {
		object := detail.(map[string]any)
		switch object["@type"] {
		case "type.googleapis.com/google.rpc.ErrorInfo":
			reason, _ = object["reason"].(string)
			if object["domain"] != "leadline" {
				a.t.Errorf("domain %v", object["domain"])
			}
		case "type.googleapis.com/google.rpc.BadRequest":
			violation := object["field_violations"].([]any)[0].(map[string]any)
			field, _ = violation["field"].(string)
		}
	}
	return reason, field
}

// wantProblem fails the test unless the answer is that error.
func (a answer) wantProblem(code int, reason engine.Reason, field string) answer {
	a.t.Helper()
	gotReason, gotField := a.want(code).problem()
	if gotReason != string(reason) || gotField != field {
		a.t.Fatalf("problem %s of %q, want %s of %q; body %s", gotReason, gotField, reason, field, a.body)
	}
	return a
}

// lockedBuffer collects the log.
type lockedBuffer struct {
	mu   sync.Mutex // guards text
	text bytes.Buffer
}

func (b *lockedBuffer) Write(p []byte) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.text.Write(p)
}

func (b *lockedBuffer) String() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.text.String()
}

const gapDeclaration = `{"unit":"mm","description":"coupling gap, brine pump 3",
 "prior":{"mean":0.80,"standard_deviation":0.05},"repeatability":{"standard_deviation":0.02},
 "dynamics":{"random_walk":{"standard_deviation":0.01,"per":"86400s"}},
 "tolerance":{"lower":0.70,"upper":0.90}}`
