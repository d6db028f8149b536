package published_test

import (
	"bufio"
	"io"
	"net"
	"net/http"
	"strconv"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/mem"
	"google.golang.org/grpc/status"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// raw is a connection on which a test says what no HTTP client would.
type raw struct {
	t testing.TB
	net.Conn
	reader *bufio.Reader
}

func (s *service) dial() *raw {
	s.t.Helper()
	c, err := net.Dial("tcp", s.address)
	if err != nil {
		s.t.Fatal(err)
	}
	s.t.Cleanup(func() { _ = c.Close() }) // most are closed by then
	if err := c.SetReadDeadline(time.Now().Add(patience)); err != nil {
		s.t.Fatal(err)
	}
	return &raw{t: s.t, Conn: c, reader: bufio.NewReader(c)}
}

func (r *raw) say(text string) {
	r.t.Helper()
	if _, err := io.WriteString(r, text); err != nil {
		r.t.Fatal(err)
	}
}

func (r *raw) answer() answer {
	r.t.Helper()
	response, err := http.ReadResponse(r.reader, nil)
	if err != nil {
		r.t.Fatalf("no answer: %v", err)
	}
	defer response.Body.Close()
	body, err := io.ReadAll(response.Body)
	if err != nil {
		r.t.Fatal(err)
	}
	return answer{r.t, response.StatusCode, response.Header, string(body)}
}

// closed waits until the service has hung up.
func (r *raw) closed() {
	r.t.Helper()
	if rest, err := io.ReadAll(r.reader); len(rest) > 0 {
		r.t.Errorf("after the answer came %q (%v)", rest, err)
	}
}

func head(path string, fields ...string) string {
	return "POST " + path + " HTTP/1.1\r\nHost: localhost\r\n" + strings.Join(fields, "\r\n") + "\r\n\r\n"
}

// A body that doesn't arrive within the read timeout is given up with 408 and
// the connection is closed; meanwhile others are served.
func TestSlowBodiesAreGivenUp(t *testing.T) {
	first := startAgreement(t)
	first.stop()
	s := startWith(t, first.file, first.clock, 2*time.Second)
	at := s.clock.Now()
	before := s.snapshotAll(at)
	var slow []*raw
	for _, request := range []string{
		head(manyPosts, "Content-Length: 1000") + `{"readings":[{"quantity":"pump-3/gap","value":0.8},`,
		head(manyPosts, "Content-Length: 1000"),
		head(readings, "Transfer-Encoding: chunked") + "c\r\n{\"value\":0.8\r\n",
		strings.Replace(head(gap, "Content-Length: 1000"), "POST", "PUT", 1) + `{"unit":"mm"`,
	} {
		r := s.dial()
		r.say(request)
		slow = append(slow, r)
	}
	wantSameSnapshot(t, "while slow bodies arrive", s.snapshotAll(at), before)
	for _, r := range slow {
		a := r.answer()
		if p := a.problem(); a.code != http.StatusRequestTimeout || p.reason != engine.MalformedBody {
			t.Errorf("status %d: %s", a.code, a.body)
		}
		r.closed()
	}
	wantSameSnapshot(t, "after the slow bodies", s.snapshotAll(at), before)
}

func TestBrokenRequestsChangeNothing(t *testing.T) {
	s := startAgreement(t)
	at := s.clock.Now()
	before := s.snapshotAll(at)
	tenMegabytes := strings.Repeat(" ", 10<<20)
	for _, tt := range []struct {
		name, request string
		hangUp        bool // after the request, as a client that dies
		code          int  // 0: none is promised
		reason        engine.Reason
	}{
		{name: "10 MB announced", request: head(manyPosts, "Content-Length: 10485760"), code: 413, reason: engine.BodyTooLarge},
		{name: "10 MB sent", request: head(manyPosts, "Content-Length: 10485760") + tenMegabytes, code: 413, reason: engine.BodyTooLarge},
		{name: "10 MB in chunks", request: head(readings, "Transfer-Encoding: chunked") + "a00000\r\n" + tenMegabytes + "\r\n0\r\n\r\n", code: 413, reason: engine.BodyTooLarge},
		{name: "10 MB to a GET", request: strings.Replace(head(gap, "Content-Length: 10485760"), "POST", "GET", 1) + tenMegabytes, code: 200},
		{name: "no HTTP", request: "\x16\x03\x01\x02\x00\r\n\r\n", code: 400},
		{name: "no host", request: "GET /v1/quantities HTTP/1.1\r\n\r\n", code: 400},
		{name: "negative length", request: head(readings, "Content-Length: -1"), code: 400},
		{name: "two lengths", request: head(readings, "Content-Length: 13", "Content-Length: 14") + `{"value":0.8}`, code: 400},
		{name: "unknown encoding", request: head(readings, "Transfer-Encoding: snail"), code: 501},
		{name: "chunk without size", request: head(readings, "Transfer-Encoding: chunked") + "zz\r\n", code: 400, reason: engine.MalformedBody},
		{name: "chunk of impossible size", request: head(readings, "Transfer-Encoding: chunked") + "ffffffffffffffffff\r\n", code: 400, reason: engine.MalformedBody},
		{name: "headers over their limit", request: head(readings, "X-Long: "+strings.Repeat("x", 100_000)), code: 431},
		{name: "hung up in the body", request: head(readings, "Content-Length: 100") + `{"value":0.8}`, hangUp: true},
		{name: "hung up in the header", request: "POST /v1/readings HTTP/1.1\r\nHost: lo", hangUp: true},
		{name: "compressed body", request: head(readings, "Content-Encoding: gzip", "Content-Length: 4") + "\x1f\x8b\x08\x00", code: 400, reason: engine.MalformedBody},
	} {
		t.Run(tt.name, func(t *testing.T) {
			r := s.under(t).dial()
			sent := make(chan struct{})
			go func() {
				defer close(sent)
				_, _ = io.WriteString(r, tt.request) // the service may hang up before the end
			}()
			if tt.hangUp {
				<-sent
				_ = r.Close()
				return
			}
			a := r.answer()
			if a.code != tt.code {
				t.Errorf("status %d, want %d; %s", a.code, tt.code, a.body)
			}
			if tt.reason != "" && a.problem().reason != tt.reason {
				t.Errorf("%s, want %s", a.body, tt.reason)
			}
			_ = r.Close()
			<-sent
		})
	}
	wantSameSnapshot(t, "after the broken requests", s.snapshotAll(at), before)
}

// rawCodec sends bytes as they are.
type rawCodec struct{}

func (rawCodec) Name() string { return "proto" }

func (rawCodec) Marshal(v any) (mem.BufferSlice, error) {
	return mem.BufferSlice{mem.SliceBuffer(v.([]byte))}, nil
}

func (rawCodec) Unmarshal(mem.BufferSlice, any) error { return nil }

// Over gRPC the library refuses what doesn't decode and what is too large, and
// so without a reason of ours; the rest is refused as over HTTP.
func TestRefusedCallsChangeNothing(t *testing.T) {
	s := startAgreement(t)
	at := s.clock.Now()
	before, position := s.snapshotAll(at), s.scrape().number(t, "leadline_ledger_position")
	ctx := t.Context()
	many := make([]*leadlinev1.Reading, 10_001)
	for i := range many {
		many[i] = reading("pump-3/gap", 0.8)
	}
	bytes := func(b ...byte) error {
		return s.conn.Invoke(ctx, leadlinev1.ReadingService_PostReadings_FullMethodName, b, new(any), grpc.ForceCodecV2(rawCodec{}))
	}
	post := func(readings ...*leadlinev1.Reading) error {
		_, err := s.readings.PostReadings(ctx, &leadlinev1.PostReadingsRequest{Readings: readings})
		return err
	}
	declare := func(q *leadlinev1.Quantity) error {
		_, err := s.quantities.DeclareQuantity(ctx, &leadlinev1.DeclareQuantityRequest{Id: "pump-3/gap", Quantity: q})
		return err
	}
	nan := 0.0
	nan /= nan
	for _, tt := range []struct {
		name   string
		err    error
		code   codes.Code
		reason engine.Reason
		field  string
	}{
		{name: "invalid UTF-8", err: bytes(0x0a, 3, 0x0a, 1, 0xff), code: codes.Internal},
		{name: "no protobuf", err: bytes(0xff, 0xff, 0xff), code: codes.Internal},
		{name: "over 4 MiB", err: bytes(append([]byte{0x7a}, make([]byte, 5<<20)...)...), code: codes.ResourceExhausted, reason: engine.BodyTooLarge},
		{name: "batch over its limit", err: post(many...), code: codes.InvalidArgument, reason: engine.BatchTooLarge, field: "readings"},
		{name: "no readings", err: post(), code: codes.InvalidArgument, reason: engine.MissingField, field: "readings"},
		{name: "no value", err: post(reading("pump-3/gap", 0.8), &leadlinev1.Reading{Quantity: "pump-3/gap"}), code: codes.InvalidArgument, reason: engine.MissingField, field: "readings[1].value"},
		{name: "no quantity", err: post(reading("", 0.8)), code: codes.InvalidArgument, reason: engine.MissingField, field: "readings[0].quantity"},
		{
			name: "time of year 10000", code: codes.InvalidArgument, reason: engine.InvalidField, field: "readings[0].time",
			err: post(atUnix(reading("pump-3/gap", 0.8), 253402300800)),
		},
		{name: "NaN as prior", err: declare(&leadlinev1.Quantity{Unit: "mm", Prior: &leadlinev1.Prior{Mean: &nan, StandardDeviation: new(1.0)}}), code: codes.InvalidArgument, reason: engine.InvalidField, field: "prior.mean"},
		{name: "NaN as repeatability", err: declare(&leadlinev1.Quantity{Unit: "mm", Repeatability: &leadlinev1.Repeatability{StandardDeviation: &nan}}), code: codes.InvalidArgument, reason: engine.InvalidField, field: "repeatability.standard_deviation"},
		{name: "NaN as limit", err: declare(&leadlinev1.Quantity{Unit: "mm", Repeatability: &leadlinev1.Repeatability{StandardDeviation: new(1.0)}, Tolerance: &leadlinev1.Tolerance{Upper: &nan}}), code: codes.InvalidArgument, reason: engine.InvalidField, field: "tolerance.upper"},
		{name: "other unit", err: declare(&leadlinev1.Quantity{Unit: "cm", Repeatability: &leadlinev1.Repeatability{StandardDeviation: new(1.0)}}), code: codes.FailedPrecondition, reason: engine.UnitFixed, field: "unit"},
		{name: "no declaration", err: declare(nil), code: codes.InvalidArgument, reason: engine.MissingField, field: "quantity"},
		{
			name: "threshold NaN", code: codes.InvalidArgument, reason: engine.InvalidField, field: "threshold",
			err: second(s.beliefs.GetBelief(ctx, &leadlinev1.GetBeliefRequest{Quantity: "pump-3/gap", Threshold: &nan})),
		},
		{
			name: "coverage NaN", code: codes.InvalidArgument, reason: engine.InvalidField, field: "coverage_probability",
			err: second(s.beliefs.GetBelief(ctx, &leadlinev1.GetBeliefRequest{Quantity: "pump-3/gap", CoverageProbability: &nan})),
		},
		{
			name: "belief of nobody", code: codes.NotFound, reason: engine.NotFound, field: "quantity",
			err: second(s.beliefs.GetBelief(ctx, &leadlinev1.GetBeliefRequest{Quantity: "nobody"})),
		},
		{
			name: "no ID", code: codes.InvalidArgument, reason: engine.InvalidID, field: "id",
			err: second(s.quantities.GetQuantity(ctx, &leadlinev1.GetQuantityRequest{Id: "a b"})),
		},
		{
			name: "old etag", code: codes.Aborted, reason: engine.ETagMismatch, field: "etag",
			err: second(s.quantities.RetireQuantity(ctx, &leadlinev1.RetireQuantityRequest{Id: "pump-3/gap", Etag: "77"})),
		},
		{
			name: "negative page", code: codes.InvalidArgument, reason: engine.InvalidField, field: "page_size",
			err: second(s.quantities.ListQuantities(ctx, &leadlinev1.ListQuantitiesRequest{PageSize: -1})),
		},
		{name: "no value in a stream", err: s.streamOne(&leadlinev1.Reading{Quantity: "pump-3/gap"}), code: codes.InvalidArgument, reason: engine.MissingField, field: "readings[0].value"},
		{name: "batch over its limit in a stream", err: s.streamOne(many...), code: codes.InvalidArgument, reason: engine.BatchTooLarge, field: "readings"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			got := status.Convert(tt.err)
			if got.Code() != tt.code {
				t.Fatalf("%v, want %v", got, tt.code)
			}
			if tt.reason == "" {
				return
			}
			if p := checkProblem(t, got.Proto()); p.reason != tt.reason || p.field != tt.field {
				t.Errorf("reason %s of field %q, want %s of %q; %s", p.reason, p.field, tt.reason, tt.field, p.message)
			}
		})
	}
	wantSameSnapshot(t, "after the refused calls", s.snapshotAll(at), before)
	if got := s.scrape().number(t, "leadline_ledger_position"); got != position {
		t.Errorf("ledger position %s, was %s: a refused call was recorded", strconv.FormatFloat(got, 'f', 0, 64), strconv.FormatFloat(position, 'f', 0, 64))
	}
}

func second[M any](_ M, err error) error { return err }

func atUnix(r *leadlinev1.Reading, seconds int64) *leadlinev1.Reading {
	at(r, time.Time{}).Time.Seconds = seconds
	return r
}

// streamOne sends one message and returns how the stream ends.
func (s *service) streamOne(readings ...*leadlinev1.Reading) error {
	stream, err := s.readings.StreamReadings(s.t.Context())
	if err != nil {
		return err
	}
	if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: 1, Readings: readings}); err != nil {
		return err
	}
	_, err = stream.Recv()
	return err
}
