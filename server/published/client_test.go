package published_test

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"net/http"
	"net/url"
	"strings"
	"testing"
	"time"

	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/timestamppb"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// answer is what came back over HTTP.
type answer struct {
	t      testing.TB
	code   int
	header http.Header
	body   string
}

// patience is how long any answer may take: far more than it does on a busy
// machine, and less than any time after which the service cuts clients that
// stall, so that waiting for one of those is seen.
const patience = 15 * time.Second

// call sends a request; header lists names and values in turn.
func (s *service) call(method, path, body string, header ...string) answer {
	s.t.Helper()
	request, err := http.NewRequestWithContext(s.t.Context(), method, "http://"+s.address+path, strings.NewReader(body))
	if err != nil {
		s.t.Fatal(err)
	}
	for i := 0; i < len(header); i += 2 {
		request.Header.Add(header[i], header[i+1])
	}
	response, err := (&http.Client{Transport: s.transport, Timeout: patience}).Do(request)
	if err != nil {
		s.t.Fatalf("%s %s: %v", method, path, err)
	}
	defer response.Body.Close()
	text, err := io.ReadAll(response.Body)
	if err != nil {
		s.t.Fatalf("%s %s: %v", method, path, err)
	}
	return answer{s.t, response.StatusCode, response.Header, string(text)}
}

// ok fails the test unless the request went through.
func (a answer) ok() answer {
	a.t.Helper()
	if a.code != http.StatusOK {
		a.t.Fatalf("status %d; body %s", a.code, a.body)
	}
	return a
}

// into reads the answer.
func (a answer) into(m proto.Message) {
	a.t.Helper()
	if err := protojson.Unmarshal([]byte(a.ok().body), m); err != nil {
		a.t.Fatalf("%v in %s", err, a.body)
	}
}

func quantityPath(id string) string { return "/v1/quantities/" + url.PathEscape(id) }

func rfc3339(t time.Time) string { return t.UTC().Format(time.RFC3339Nano) }

func (s *service) declare(id, declaration string) {
	s.t.Helper()
	s.call("PUT", quantityPath(id), declaration).ok()
}

// beliefText asks over HTTP for the belief at an instant, the zero one for now,
// and returns the answer as it came. It asks again while the belief is rebuilt.
func (s *service) beliefText(id string, at time.Time, parameters ...string) string {
	s.t.Helper()
	query := url.Values{}
	if !at.IsZero() {
		query.Set("time", rfc3339(at))
	}
	for i := 0; i < len(parameters); i += 2 {
		query.Set(parameters[i], parameters[i+1])
	}
	for range 1_000_000 {
		text := s.call("GET", quantityPath(id)+"/belief?"+query.Encode(), "").ok().body
		if !strings.Contains(text, `"rebuilding":true`) {
			return text
		}
	}
	s.t.Fatalf("the belief of %s is still being rebuilt", id)
	return ""
}

// belief asks over HTTP and over gRPC, and insists on the same bits. Steps are recorded
// after the readings that show them were answered, so the ledger position, and nothing
// else, may go on between the two; it asks again then.
func (s *service) belief(id string, at time.Time) *leadlinev1.Belief {
	s.t.Helper()
	request := &leadlinev1.GetBeliefRequest{Quantity: id}
	if !at.IsZero() {
		request.Time = timestamppb.New(at)
	}
	for range 100 {
		overHTTP := new(leadlinev1.Belief)
		text := s.beliefText(id, at)
		if err := protojson.Unmarshal([]byte(text), overHTTP); err != nil {
			s.t.Fatalf("%v in %s", err, text)
		}
		overGRPC, err := s.beliefs.GetBelief(s.t.Context(), request)
		if err != nil {
			s.t.Fatal(err)
		}
		before, after := overHTTP.GetLedgerPosition(), overGRPC.GetLedgerPosition()
		if before < after {
			overGRPC.LedgerPosition = before
		}
		// proto.Equal compares numbers by ==, which here is by bits but for -0.
		if !proto.Equal(overHTTP, overGRPC) {
			s.t.Errorf("belief of %s at %v over HTTP\n%v\nand, at ledger position %d, over gRPC\n%v", id, at, overHTTP, after, overGRPC)
		}
		if before >= after {
			return overHTTP
		}
	}
	s.t.Fatalf("the ledger position of %s goes on although nothing is posted", id)
	return nil
}

// settle waits until steps found in what was answered so far are recorded: a declaration as
// it stands records nothing, and is answered in its turn.
func (s *service) settle(id, declaration string) {
	s.t.Helper()
	s.declare(id, declaration)
}

// posted is a reading on its way.
type posted struct {
	Quantity    string   `json:"quantity"`
	Value       float64  `json:"value"`
	Time        string   `json:"time,omitempty"`
	Uncertainty *float64 `json:"random_standard_uncertainty,omitempty"`
	ID          string   `json:"reading_id,omitempty"`
	Instrument  string   `json:"instrument,omitempty"`
	Occasion    string   `json:"occasion,omitempty"`
}

func (p posted) message() *leadlinev1.Reading {
	m := &leadlinev1.Reading{Quantity: p.Quantity, Value: &p.Value, ReadingId: p.ID, RandomStandardUncertainty: p.Uncertainty, Instrument: p.Instrument, Occasion: p.Occasion}
	if p.Time != "" {
		t, err := time.Parse(time.RFC3339Nano, p.Time)
		if err != nil {
			panic(fmt.Sprintf("a test's own time: %v", err))
		}
		m.Time = timestamppb.New(t)
	}
	return m
}

func messages(readings []posted) []*leadlinev1.Reading {
	var all []*leadlinev1.Reading
	for _, r := range readings {
		all = append(all, r.message())
	}
	return all
}

// postHTTP posts a batch.
func (s *service) postHTTP(readings []posted) *leadlinev1.PostReadingsResponse {
	s.t.Helper()
	body, err := json.Marshal(map[string]any{"readings": readings})
	if err != nil {
		s.t.Fatal(err)
	}
	response := new(leadlinev1.PostReadingsResponse)
	s.call("POST", "/v1/readings", string(body)).into(response)
	return response
}

// postGRPC does the same over gRPC.
func (s *service) postGRPC(readings []posted) *leadlinev1.PostReadingsResponse {
	s.t.Helper()
	ctx, cancel := context.WithTimeout(s.t.Context(), patience)
	defer cancel()
	response, err := s.readings.PostReadings(ctx, &leadlinev1.PostReadingsRequest{Readings: messages(readings)})
	if err != nil {
		s.t.Fatal(err)
	}
	return response
}

// postAll posts in batches, in turn over HTTP and gRPC, and insists that every
// reading is applied.
func (s *service) postAll(readings []posted) {
	s.t.Helper()
	const most = 700
	for i, from := 0, 0; from < len(readings); i, from = i+1, from+most {
		batch := readings[from:min(from+most, len(readings))]
		var response *leadlinev1.PostReadingsResponse
		if i%2 == 0 {
			response = s.postHTTP(batch)
		} else {
			response = s.postGRPC(batch)
		}
		if int(response.GetAppliedCount()) != len(batch) {
			s.t.Fatalf("%d of %d readings applied: %v", response.GetAppliedCount(), len(batch), response.GetResults())
		}
	}
}

// readingsOf makes readings of values, without time and ID.
func readingsOf(id string, values []float64) []posted {
	var all []posted
	for _, v := range values {
		all = append(all, posted{Quantity: id, Value: v})
	}
	return all
}

// near reports whether got is want within a relative tolerance.
func near(got, want, tolerance float64) bool {
	return math.Abs(got-want) <= tolerance*math.Abs(want)
}

func wantNear(t testing.TB, what string, got, want, tolerance float64) {
	t.Helper()
	if !near(got, want, tolerance) {
		t.Errorf("%s is %v, want %v within %v of it", what, got, want, tolerance)
	}
}

// roundsTo tells whether x, rounded as printed is, prints the same.
func roundsTo(x float64, printed string) bool {
	_, decimals, _ := strings.Cut(printed, ".")
	return fmt.Sprintf("%.*f", len(decimals), x) == printed
}

func wantPrinted(t testing.TB, what string, got float64, printed string) {
	t.Helper()
	if !roundsTo(got, printed) {
		t.Errorf("%s is %v, which is not the printed %s", what, got, printed)
	}
}
