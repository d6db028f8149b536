package server

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"net/http"
	"net/http/httptest"
	"runtime"
	"testing"
	"time"

	"leadline.example/engine"
)

// scaleFixture has 10,000 quantities: 7,000 walks of known repeatability and
// 3,000 constants whose repeatability is learned, 20 readings each. Between
// two scrapes nothing changes but the time, which moves every walk's belief.
func scaleFixture(b *testing.B) pageFixture { return populated(b, 0) }

// mixedFixture is scaleFixture where one quantity in ten has readings or a repeatability that
// take another method: of a hundred, five walks that learn theirs (BANK), two that stay and
// are displayed coarsely (COUNTS), three walks with outliers (GRID).
func mixedFixture(b *testing.B) pageFixture { return populated(b, 10) }

// populated declares 10,000 quantities, of whose first hundredths some are mixed in, and posts
// their readings.
func populated(b *testing.B, mixed int) pageFixture {
	now := scrapeTime
	f := newPageFixture(b, func(o *MetricsOptions) {
		o.Now = func() time.Time { now = now.Add(15 * time.Second); return now }
	})
	random := rand.New(rand.NewPCG(1, 2))
	ids := make([]engine.QuantityID, 10_000)
	for i := range ids {
		ids[i] = engine.QuantityID(fmt.Sprintf("hall-%02d.rack-%02d.point-%04d", i/1000, i/100%10, i))
		d := roomDeclaration()
		d.Tolerance.HasLower, d.Tolerance.Lower = true, -26
		if i%10 >= 7 {
			d.Dynamics, d.Prior = engine.Dynamics{}, engine.Prior{}
			d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
		}
		if i%100 < mixed {
			mixIn(&d, i%100)
		}
		f.declare(b, string(ids[i]), d)
	}
	coarse := engine.InstrumentDeclaration{Unit: roomDeclaration().Unit, Resolution: 2}
	if _, _, err := f.keeper.DeclareInstrument(context.Background(), "coarse", coarse, engine.Condition{}, engine.InstantOf(scrapeTime)); err != nil {
		b.Fatal(err)
	}
	for n := range 20 {
		batch := engine.Batch{Receive: engine.InstantOf(scrapeTime)}
		at := engine.InstantOf(scrapeTime.Add(time.Duration(n-20) * time.Minute))
		for i, id := range ids {
			r := engine.Reading{Quantity: id, Value: -22 + random.NormFloat64(), HasTime: true, Time: at}
			if k := i % 100; k < mixed && k >= 5 && k < 7 {
				r.Instrument, r.Value = "coarse", 2*math.Round(r.Value/2)
			}
			batch.Readings = append(batch.Readings, r)
		}
		results, err := f.keeper.Post(context.Background(), batch)
		if err != nil {
			b.Fatal(err)
		}
		for _, res := range results {
			if res.Status != engine.Applied {
				b.Fatal(res)
			}
		}
	}
	return f
}

// mixIn changes the declaration of the quantity of that number among a hundred.
func mixIn(d *engine.Declaration, number int) {
	switch {
	case number < 5:
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 1, Worth: 4}
	case number < 7:
		d.Dynamics = engine.Dynamics{}
	default:
		d.Outliers = engine.Outliers{Probability: 0.01, Inflation: 10}
	}
}

// BenchmarkScrape compares a scrape over loopback with sending the same bytes
// from memory, in turns: x-cached is the ratio of their times. With gzip the
// cached page is compressed each time too. The server's garbage is measured
// without a connection.
func BenchmarkScrape(b *testing.B) { scrape(b, scaleFixture(b)) }

// BenchmarkScrapeMixed is BenchmarkScrape with one quantity in ten held otherwise.
func BenchmarkScrapeMixed(b *testing.B) { scrape(b, mixedFixture(b)) }

func scrape(b *testing.B, f pageFixture) {
	for _, coding := range []string{"identity", "gzip"} {
		b.Run("coding="+coding, func(b *testing.B) {
			live := httptest.NewServer(f.page)
			defer live.Close()
			var page bytes.Buffer
			get(b, live, "identity", &page)
			cached := httptest.NewServer(cachedPage(page.Bytes(), coding))
			defer cached.Close()
			get(b, cached, coding, nil)
			var liveTime, cachedTime time.Duration
			for b.Loop() {
				start := time.Now()
				get(b, live, coding, nil)
				middle := time.Now()
				get(b, cached, coding, nil)
				liveTime += middle.Sub(start)
				cachedTime += time.Since(middle)
			}
			n := float64(b.N)
			b.ReportMetric(liveTime.Seconds()/n*1e3, "ms/scrape")
			b.ReportMetric(cachedTime.Seconds()/n*1e3, "ms/cached")
			b.ReportMetric(liveTime.Seconds()/cachedTime.Seconds(), "x-cached")
			b.ReportMetric(float64(page.Len()), "page-bytes")
			b.ReportMetric(scrapeGarbage(f.page, coding), "garbage-B/scrape")
		})
	}
}

// get reads a page to its end over a connection that is kept, into nowhere if
// into is nil.
func get(b *testing.B, s *httptest.Server, coding string, into io.Writer) {
	r, err := http.NewRequest(http.MethodGet, s.URL, nil)
	if err != nil {
		b.Fatal(err)
	}
	r.Header.Set("Accept-Encoding", coding)
	response, err := s.Client().Do(r)
	if err != nil {
		b.Fatal(err)
	}
	defer response.Body.Close()
	if response.StatusCode != http.StatusOK {
		b.Fatalf("status %s", response.Status)
	}
	if into == nil {
		into = io.Discard
	}
	if _, err := io.Copy(into, response.Body); err != nil {
		b.Fatal(err)
	}
}

func cachedPage(page []byte, coding string) http.Handler {
	x := &exposition{rest: page}
	return http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) {
		w.Header().Set("Content-Type", textFormat)
		if coding == "identity" {
			_ = x.send(w)
			return
		}
		w.Header().Set("Content-Encoding", "gzip")
		_ = x.sendZipped(w)
	})
}

// discardWriter is a client that takes everything at once.
type discardWriter struct{ header http.Header }

func (d discardWriter) Header() http.Header         { return d.header }
func (d discardWriter) Write(p []byte) (int, error) { return len(p), nil }
func (d discardWriter) WriteHeader(int)             {}

// BenchmarkRenderPage is the part of a scrape without a connection.
func BenchmarkRenderPage(b *testing.B) {
	f := scaleFixture(b)
	r := httptest.NewRequest(http.MethodGet, "/metrics", nil)
	b.ReportAllocs()
	for b.Loop() {
		f.page.ServeHTTP(discardWriter{http.Header{}}, r)
	}
}

func scrapeGarbage(m *Metrics, coding string) float64 {
	r := httptest.NewRequest(http.MethodGet, "/metrics", nil)
	r.Header.Set("Accept-Encoding", coding)
	const scrapes = 10
	var before, after runtime.MemStats
	m.ServeHTTP(discardWriter{http.Header{}}, r)
	runtime.ReadMemStats(&before)
	for range scrapes {
		m.ServeHTTP(discardWriter{http.Header{}}, r)
	}
	runtime.ReadMemStats(&after)
	return float64(after.TotalAlloc-before.TotalAlloc) / scrapes
}
