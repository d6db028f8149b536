package published_test

import (
	"context"
	"fmt"
	"net"
	"strings"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// stall opens a connection with a small buffer, asks for a path again and again,
// reads the first line of the first answer, and nothing after that. The answers
// together are more than the buffers of both ends hold.
func (s *service) stall(path string) *raw {
	s.t.Helper()
	r := s.dial()
	if err := r.Conn.(*net.TCPConn).SetReadBuffer(4096); err != nil {
		s.t.Fatal(err)
	}
	r.say(strings.Repeat("GET "+path+" HTTP/1.1\r\nHost: localhost\r\n\r\n", 20))
	line, err := r.reader.ReadString('\n')
	if err != nil || !strings.Contains(line, "200") {
		s.t.Fatalf("%s: %q, %v", path, line, err)
	}
	return r
}

// Clients that stopped reading, be they watching or scraping, hold up neither
// ingest nor queries nor those who do read: some 50 MB of events would have
// been due to them. A service that waited for them would never get through this.
func TestStalledClientsHoldUpNobody(t *testing.T) {
	const quantities, rounds = 1000, 15
	s := start(t)
	var batch []posted
	for i := range quantities {
		id := fmt.Sprint("store/", i)
		if _, err := s.quantities.DeclareQuantity(t.Context(), &leadlinev1.DeclareQuantityRequest{Id: id, Quantity: &leadlinev1.Quantity{
			Unit:          "°C",
			Prior:         &leadlinev1.Prior{Mean: new(-20.0), StandardDeviation: new(2.0)},
			Repeatability: &leadlinev1.Repeatability{StandardDeviation: new(0.2)},
			Tolerance:     &leadlinev1.Tolerance{Upper: new(-18.0)},
		}}); err != nil {
			t.Fatal(err)
		}
		batch = append(batch, posted{Quantity: id, Value: -20})
	}
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	if _, err := s.beliefs.WatchBeliefs(ctx, &leadlinev1.WatchBeliefsRequest{}); err != nil { // and never Recv
		t.Fatal(err)
	}
	stalled := []*raw{s.stall("/v1/beliefs:watch"), s.stall("/v1/beliefs:watch?prefix=store/"), s.stall("/metrics"), s.stall("/metrics"), s.stall("/v1/beliefs?page_size=1000")}
	healthy := s.follow("store/0")

	for round := range rounds {
		for i := range batch {
			batch[i].Value, batch[i].ID = -20+float64(round)/100, fmt.Sprint("r", round)
			batch[i].Time = rfc3339(noon.Add(time.Duration(round) * time.Second))
		}
		s.postAll(batch)
		if round%5 == 0 {
			s.belief("store/7", time.Time{})
			s.scrape()
		}
	}
	if n := s.belief("store/999", time.Time{}).GetReadingCount(); n != rounds {
		t.Errorf("%d readings, want %d", n, rounds)
	}
	if n := s.scrape().number(t, `leadline_readings_total{reason="",status="APPLIED"}`); n != quantities*rounds {
		t.Errorf("%v readings counted, want %d", n, quantities*rounds)
	}
	healthy.until(fmt.Sprintf(`"reading_count":%d,`, rounds))
	for _, r := range stalled {
		_ = r.Close()
	}
	cancel()
}

// follower is a watcher that reads.
type follower struct{ *raw }

func (s *service) follow(id string) follower {
	s.t.Helper()
	r := s.dial()
	r.say("GET /v1/beliefs:watch?prefix=" + id + " HTTP/1.1\r\nHost: localhost\r\n\r\n")
	return follower{r}
}

// until reads events until one has the text. Each has to be whole.
func (f follower) until(text string) {
	f.t.Helper()
	for {
		line, err := f.reader.ReadString('\n')
		if err != nil {
			f.t.Fatalf("the watch ended before %s: %v", text, err)
		}
		if strings.HasPrefix(line, "data:") && strings.Contains(line, text) {
			_ = f.Close()
			return
		}
	}
}

// What a watch sends last is the belief as it is asked for, over both
// protocols, however many changes were conflated.
func TestWatchEndsWithTheLatestBelief(t *testing.T) {
	s := startAgreement(t)
	overHTTP := s.follow("pump-3/")
	stream, err := s.beliefs.WatchBeliefs(t.Context(), &leadlinev1.WatchBeliefsRequest{Prefix: "pump-3/"})
	if err != nil {
		t.Fatal(err)
	}
	const more = 200
	for i := range more {
		s.postAll([]posted{{Quantity: "pump-3/gap", Value: 0.8 + float64(i%7)/100}})
	}
	want := s.belief("pump-3/gap", time.Time{})
	overHTTP.until(fmt.Sprintf(`"mean":%s,`, number(want.GetMean())))
	events := 0
	for {
		event, err := stream.Recv()
		if err != nil {
			t.Fatalf("the watch ended: %v", err)
		}
		events++
		if b := event.GetBelief(); b.GetReadingCount() == want.GetReadingCount() {
			if b.GetMean() != want.GetMean() || b.GetLedgerPosition() != want.GetLedgerPosition() {
				t.Errorf("last event\n%v\nwant\n%v", b, want)
			}
			break
		}
	}
	if events > more+1 {
		t.Errorf("%d events for %d changes", events, more)
	}
	s.call("DELETE", quantityPath("pump-3/gap"), "").ok()
	if event, err := stream.Recv(); err != nil || event.GetRetiredQuantity() != "pump-3/gap" {
		t.Errorf("after the retirement: %v, %v", event, err)
	}
}
