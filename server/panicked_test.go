package server_test

import (
	"context"
	"io"
	"net/http"
	"path/filepath"
	"strings"
	"testing"

	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
	"leadline.example/server"
)

// brokenKeeper panics, as a mistake in the service would.
type brokenKeeper struct{ server.ReadingKeeper }

func (brokenKeeper) Post(context.Context, engine.Batch) ([]engine.Result, error) {
	panic("broken post")
}

func (brokenKeeper) Submit(engine.Batch, func([]engine.Result, error)) error { panic("broken submit") }

func TestPanicEndsOneRequestOnly(t *testing.T) {
	r := startServerOn(t, filepath.Join(t.TempDir(), "ledger"), newClock(), func(o *server.Options) {
		o.Readings = brokenKeeper{o.Keeper}
		o.Metrics = http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) {
			_, _ = w.Write([]byte(strings.Repeat("half a page\n", 1000)))
			panic("broken page")
		})
	})
	batch := []*leadlinev1.Reading{reading("gap", 0.8, "")}
	for _, test := range []struct {
		name string
		call func() codes.Code
	}{
		{"fast route", func() codes.Code {
			return codeOf(r.call("POST", "/v1/readings", `{"readings":[{"quantity":"gap","value":1}]}`).want(500))
		}},
		{"gRPC", func() codes.Code {
			_, err := r.readings.PostReadings(t.Context(), &leadlinev1.PostReadingsRequest{Readings: batch})
			return status.Code(err)
		}},
		{"stream", func() codes.Code {
			stream, err := r.readings.StreamReadings(t.Context())
			if err != nil {
				t.Fatal(err)
			}
			if err := stream.Send(&leadlinev1.StreamReadingsRequest{Readings: batch}); err != nil {
				t.Fatal(err)
			}
			_, err = stream.Recv()
			return status.Code(err)
		}},
	} {
		t.Run(test.name, func(t *testing.T) {
			before := len(r.log.String())
			if got := test.call(); got != codes.Internal {
				t.Errorf("answered %v, want Internal", got)
			}
			if log := r.log.String()[before:]; !strings.Contains(log, "level=ERROR") || !strings.Contains(log, "panic: broken") {
				t.Errorf("the log doesn't tell:\n%s", log)
			}
			r.call("GET", "/healthz", "").want(200)
		})
	}

	response, err := http.Get(r.url + "/metrics")
	if err != nil {
		t.Fatal(err)
	}
	defer response.Body.Close()
	if page, err := io.ReadAll(response.Body); err == nil {
		t.Errorf("half an answer of %d bytes passes for a whole one", len(page))
	}
	if log := r.log.String(); !strings.Contains(log, "panic: broken page") {
		t.Errorf("the log doesn't tell of the answer broken off:\n%s", log)
	}
}

func codeOf(a answer) codes.Code {
	a.t.Helper()
	number, err := a.json("code").(interface{ Int64() (int64, error) }).Int64()
	if err != nil {
		a.t.Fatal(err)
	}
	return codes.Code(number)
}
