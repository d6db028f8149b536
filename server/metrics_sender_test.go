package server

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"net/http/httptest"
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
)

// smallBuffers is a listener whose connections buffer little, so that a client
// who stops reading is felt within a page.
type smallBuffers struct{ net.Listener }

func (l smallBuffers) Accept() (net.Conn, error) {
	c, err := l.Listener.Accept()
	if err == nil {
		err = c.(*net.TCPConn).SetWriteBuffer(4 << 10)
	}
	return c, err
}

// scrapeStalled begins to read a page and stops.
func scrapeStalled(ctx context.Context, t *testing.T, server *httptest.Server) {
	t.Helper()
	client := &http.Client{Transport: &http.Transport{
		DialContext: func(ctx context.Context, network, address string) (net.Conn, error) {
			c, err := new(net.Dialer).DialContext(ctx, network, address)
			if err == nil {
				err = c.(*net.TCPConn).SetReadBuffer(4 << 10)
			}
			return c, err
		},
		DisableCompression: true,
	}}
	request, err := http.NewRequestWithContext(ctx, http.MethodGet, server.URL, nil)
	if err != nil {
		t.Fatal(err)
	}
	response, err := client.Do(request)
	if err != nil {
		t.Fatalf("a client is kept waiting by those who don't read: %v", err)
	}
	t.Cleanup(func() { response.Body.Close() })
}

// Clients who stop reading fill all slots, and more of them wait. Their own
// deadline is far away; whoever wants the page gets it nevertheless, whole.
func TestStalledScrapersAreCutForOthers(t *testing.T) {
	f := newPageFixture(t, func(o *MetricsOptions) { o.WriteTimeout = time.Hour })
	d := roomDeclaration()
	d.Description = strings.Repeat("x", engine.MaxDescriptionBytes)
	for i := range 2000 {
		f.declare(t, fmt.Sprintf("room-%d.temperature", i), d)
	}
	server := httptest.NewUnstartedServer(f.page)
	server.Listener = smallBuffers{server.Listener}
	server.Start()
	defer server.CloseClientConnections()
	ctx, cancel := context.WithTimeout(t.Context(), 30*time.Second)
	defer cancel()
	for range maxPages + 4 {
		scrapeStalled(ctx, t, server)
	}
	for _, coding := range []string{"identity", "gzip"} {
		request, err := http.NewRequestWithContext(ctx, http.MethodGet, server.URL, nil)
		if err != nil {
			t.Fatal(err)
		}
		request.Header.Set("Accept-Encoding", coding)
		response, err := server.Client().Do(request)
		if err != nil {
			t.Fatalf("an honest client is kept waiting: %v", err)
		}
		defer response.Body.Close()
		page, err := io.ReadAll(response.Body)
		if err != nil {
			t.Fatalf("an honest client was cut after %d bytes: %v", len(page), err)
		}
		if coding == "identity" && !strings.Contains(string(page), "\nleadline_ready ") {
			t.Errorf("the page of %d bytes has no end", len(page))
		}
	}
}

// Only who makes no progress is cut, the one longest without first, and nobody
// twice.
func TestSlowestSenderIsCutFirst(t *testing.T) {
	var s senders
	if wait := s.cutOne(); wait != stallTime {
		t.Errorf("looks again after %v, want %v", wait, stallTime)
	}
	slow, slower, quick := s.begin(httptest.NewRecorder(), time.Hour), s.begin(httptest.NewRecorder(), time.Hour), s.begin(httptest.NewRecorder(), time.Hour)
	slow.progress = time.Now().Add(-time.Minute)
	slower.progress = time.Now().Add(-time.Hour)
	quick.progress = time.Now().Add(time.Hour)
	for i, want := range [][3]bool{{false, true, false}, {true, true, false}, {true, true, false}} {
		s.cutOne()
		if got := [3]bool{slow.cut, slower.cut, quick.cut}; got != want {
			t.Errorf("round %d: cut %v, want %v", i, got, want)
		}
	}
	if _, err := slow.Write([]byte("x")); !errors.Is(err, errCut) {
		t.Errorf("a client that was cut is sent more: %v", err)
	}
	if _, err := quick.Write(make([]byte, 3*partBytes)); err != nil || quick.ResponseWriter.(*httptest.ResponseRecorder).Body.Len() != 3*partBytes {
		t.Errorf("a quick client didn't get all: %v", err)
	}
	for _, x := range []*sender{slow, slower, quick} {
		s.end(x)
	}
	if len(s.all) != 0 {
		t.Errorf("%d senders are left", len(s.all))
	}
}

// brokenFigures is a keeper whose evaluation panics.
type brokenFigures struct{ metricsKeeper }

func (brokenFigures) Figures(*engine.View, engine.Instant) (engine.Figures, error) {
	panic("broken figures")
}

// A panic in one of the goroutines of a page would end the process.
func TestPanicOfAPartReachesTheRequest(t *testing.T) {
	f := plantFixture(t, nil)
	f.page.keeper = brokenFigures{f.page.keeper}
	scrape := func() error {
		return recovered(func() error {
			f.page.ServeHTTP(httptest.NewRecorder(), httptest.NewRequest(http.MethodGet, "/metrics", nil))
			return nil
		})
	}
	for range maxPages + 1 { // nothing is held by those before
		if err := scrape(); err == nil || !strings.Contains(err.Error(), "broken figures") {
			t.Fatalf("the page panicked with %v", err)
		}
	}
}
