package server

import (
	"bytes"
	"context"
	"io"
	"net/http"
	"net/http/httptest"
	"testing"

	"github.com/grpc-ecosystem/grpc-gateway/v2/runtime"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// instantKeeper answers at once, so that what is measured is the way in and out.
type instantKeeper struct{ ReadingKeeper }

func (instantKeeper) Post(_ context.Context, b engine.Batch) ([]engine.Result, error) {
	results := make([]engine.Result, len(b.Readings))
	for i, r := range b.Readings {
		results[i] = engine.Result{ReadingID: r.ID, Time: r.Time, Status: engine.Applied}
	}
	return results, nil
}

// BenchmarkBatchOf1000 compares the service's handler of POST /v1/readings with
// a stock gateway in front of the same service: its own mux, protojson in and
// out. The checks of the strict dialect are on the service's side only.
func BenchmarkBatchOf1000(b *testing.B) {
	readings := &readingService{keeper: instantKeeper{}, now: fixedClock}
	stock := runtime.NewServeMux()
	if err := leadlinev1.RegisterReadingServiceHandlerServer(b.Context(), stock, readings); err != nil {
		b.Fatal(err)
	}
	s := &services{readings: readings, quantities: &quantityService{}, beliefs: &beliefService{}}
	h, err := newREST(b.Context(), s, newOrigins(true), nil)
	if err != nil {
		b.Fatal(err)
	}
	h.special = map[string]specialHandler{"POST /v1/readings": newIngest(readings).postReadings}

	const size = 1000
	body := batchBody(size)
	var perBatch [2]float64
	for i, handler := range []struct {
		name string
		http.Handler
	}{{"handler=stock-gateway", stock}, {"handler=service", h}} {
		b.Run(handler.name, func(b *testing.B) {
			b.ReportAllocs()
			b.SetBytes(int64(len(body)))
			for b.Loop() {
				request := httptest.NewRequest(http.MethodPost, "/v1/readings", bytes.NewReader(body))
				w := discardResponse{header: http.Header{}}
				handler.ServeHTTP(&w, request)
				if w.code > 200 {
					b.Fatalf("status %d", w.code)
				}
			}
			perBatch[i] = float64(b.Elapsed()) / float64(b.N)
			b.ReportMetric(float64(size*b.N)/b.Elapsed().Seconds(), "readings/s")
			if i == 1 && perBatch[0] > 0 {
				b.ReportMetric(perBatch[0]/perBatch[1], "stock/service")
			}
		})
	}
}

// discardResponse is a ResponseWriter that keeps the status alone.
type discardResponse struct {
	header http.Header
	code   int
}

func (w *discardResponse) Header() http.Header         { return w.header }
func (w *discardResponse) WriteHeader(code int)        { w.code = code }
func (w *discardResponse) Write(p []byte) (int, error) { return io.Discard.Write(p) }

func BenchmarkDecodeBatchOf1000(b *testing.B) {
	body := batchBody(1000)
	for _, decoder := range []struct {
		name   string
		decode func([]byte) ([]engine.Reading, error)
	}{{"decoder=fast", decodeReadings}, {"decoder=strict", decodeReadingsStrictly}} {
		b.Run(decoder.name, func(b *testing.B) {
			b.ReportAllocs()
			b.SetBytes(int64(len(body)))
			for b.Loop() {
				if _, err := decoder.decode(body); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}

func BenchmarkOneReading(b *testing.B) {
	body := []byte(`{"value":0.83,"time":"2026-03-01T12:00:00Z","reading_id":"gw7-1"}`)
	b.ReportAllocs()
	for b.Loop() {
		if _, err := decodeReading("gap", body); err != nil {
			b.Fatal(err)
		}
	}
}
