package server_test

import (
	"context"
	"errors"
	"fmt"
	"io"
	"strings"
	"testing"
	"time"

	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/grpc/codes"
	healthgrpc "google.golang.org/grpc/health/grpc_health_v1"
	reflectiongrpc "google.golang.org/grpc/reflection/grpc_reflection_v1"
	"google.golang.org/grpc/status"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

func reading(quantity string, value float64, id string) *leadlinev1.Reading {
	return &leadlinev1.Reading{Quantity: quantity, Value: &value, ReadingId: id}
}

func TestStreamAcknowledgesInOrder(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	stream, err := r.readings.StreamReadings(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	const batches = 200 // many times what may be unacknowledged
	sent := make(chan error, 1)
	go func() {
		for i := range batches {
			message := &leadlinev1.StreamReadingsRequest{Sequence: uint64(1000 + i), Readings: []*leadlinev1.Reading{
				reading("gap", 0.8, fmt.Sprintf("r%d", i)), reading("gap", 0.8, fmt.Sprintf("r%d", i)), reading("none", 0.8, ""),
			}}
			if err := stream.Send(message); err != nil {
				sent <- err
				return
			}
		}
		sent <- stream.CloseSend()
	}()
	for i := range batches {
		ack, err := stream.Recv()
		if err != nil {
			t.Fatal(err)
		}
		if ack.GetSequence() != uint64(1000+i) || ack.GetAppliedCount() != 1 || ack.GetDuplicateCount() != 1 || ack.GetRefusedCount() != 1 {
			t.Fatalf("acknowledgement %d: %v", i, ack)
		}
		if got := ack.GetResults()[2].GetReason(); got != string(engine.UnknownQuantity) {
			t.Fatalf("reason %s", got)
		}
	}
	if _, err := stream.Recv(); !errors.Is(err, io.EOF) {
		t.Errorf("after the last acknowledgement: %v", err)
	}
	if err := <-sent; err != nil {
		t.Error(err)
	}
}

// A bad batch ends the stream, but what came before it is acknowledged.
func TestBadBatchEndsTheStream(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	stream, err := r.readings.StreamReadings(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for i, readings := range [][]*leadlinev1.Reading{{reading("gap", 0.8, "")}, {reading("gap", 0.8, ""), {Quantity: "gap"}}} {
		if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: uint64(i), Readings: readings}); err != nil {
			t.Fatal(err)
		}
	}
	if ack, err := stream.Recv(); err != nil || ack.GetAppliedCount() != 1 {
		t.Errorf("%v, %v", ack, err)
	}
	_, err = stream.Recv()
	wantStatus(t, err, codes.InvalidArgument, engine.MissingField, "readings[1].value")
}

func TestSequenceHasToRise(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	for _, test := range []struct {
		name string
		sent []uint64 // all but the last are good
	}{
		{"repeated", []uint64{7, 7}},
		{"repeated 0", []uint64{0, 0}},
		{"falling", []uint64{1, 5, 4}},
	} {
		t.Run(test.name, func(t *testing.T) {
			stream, err := r.readings.StreamReadings(t.Context())
			if err != nil {
				t.Fatal(err)
			}
			for _, sequence := range test.sent {
				message := &leadlinev1.StreamReadingsRequest{Sequence: sequence, Readings: []*leadlinev1.Reading{reading("gap", 0.8, "")}}
				if err := stream.Send(message); err != nil {
					t.Fatal(err)
				}
			}
			for _, want := range test.sent[:len(test.sent)-1] {
				if ack, err := stream.Recv(); err != nil || ack.GetSequence() != want {
					t.Fatalf("acknowledgement %v, %v; want %d", ack, err, want)
				}
			}
			_, err = stream.Recv()
			wantStatus(t, err, codes.InvalidArgument, engine.InvalidField, "sequence")
		})
	}
}

func TestMessageOverTheLimitHasAReason(t *testing.T) {
	r := startServer(t)
	stream, err := r.readings.StreamReadings(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	large := reading("gap", 0.8, strings.Repeat("x", 4<<20))
	if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: 1, Readings: []*leadlinev1.Reading{large}}); err != nil && !errors.Is(err, io.EOF) {
		t.Fatal(err)
	}
	_, err = stream.Recv()
	wantStatus(t, err, codes.ResourceExhausted, engine.BodyTooLarge, "")
	_, err = r.readings.PostReadings(t.Context(), &leadlinev1.PostReadingsRequest{Readings: []*leadlinev1.Reading{large}})
	wantStatus(t, err, codes.ResourceExhausted, engine.BodyTooLarge, "")
	watch, err := r.beliefs.WatchBeliefs(t.Context(), &leadlinev1.WatchBeliefsRequest{Prefix: large.ReadingId})
	if err != nil {
		t.Fatal(err)
	}
	_, err = watch.Recv()
	wantStatus(t, err, codes.ResourceExhausted, engine.BodyTooLarge, "")
	large.ReadingId += large.ReadingId // beyond what gRPC takes, which gives no reason
	_, err = r.readings.PostReadings(t.Context(), &leadlinev1.PostReadingsRequest{Readings: []*leadlinev1.Reading{large}})
	wantStatus(t, err, codes.ResourceExhausted, "", "")
}

func wantStatus(t testing.TB, err error, code codes.Code, reason engine.Reason, field string) {
	t.Helper()
	st := status.Convert(err)
	var gotReason, gotField string
	for _, detail := range st.Details() {
		switch detail := detail.(type) {
		case *errdetails.ErrorInfo:
			gotReason = detail.GetReason()
		case *errdetails.BadRequest:
			gotField = detail.GetFieldViolations()[0].GetField()
		}
	}
	if st.Code() != code || gotReason != string(reason) || gotField != field {
		t.Errorf("%v with %s of %q, want %v with %s of %q", st, gotReason, gotField, code, reason, field)
	}
}

func TestStoppingEndsStreamsAfterTheirAcknowledgements(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	stream, err := r.readings.StreamReadings(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: 1, Readings: []*leadlinev1.Reading{reading("gap", 0.8, "")}}); err != nil {
		t.Fatal(err)
	}
	if _, err := stream.Recv(); err != nil {
		t.Fatal(err)
	}
	watch, err := r.beliefs.WatchBeliefs(t.Context(), &leadlinev1.WatchBeliefsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := watch.Recv(); err != nil {
		t.Fatal(err)
	}
	events := r.watch(t.Context(), "HTTP", "")
	next(t, events)
	stopped := make(chan struct{})
	go func() { r.stop(); close(stopped) }()
	if _, err := stream.Recv(); status.Code(err) != codes.Unavailable {
		t.Errorf("ingest stream ended with %v", err)
	}
	if _, err := watch.Recv(); status.Code(err) != codes.Unavailable {
		t.Errorf("watch ended with %v", err)
	}
	if _, err := events(); err == nil || !strings.Contains(err.Error(), `"code":14`) {
		t.Errorf("server-sent events ended with %v", err)
	}
	<-stopped
}

func TestGRPCRefusesWithDetails(t *testing.T) {
	r := startServer(t)
	ctx := t.Context()
	_, err := r.quantities.GetQuantity(ctx, &leadlinev1.GetQuantityRequest{Id: "none"})
	wantStatus(t, err, codes.NotFound, engine.NotFound, "id")
	_, err = r.quantities.DeclareQuantity(ctx, &leadlinev1.DeclareQuantityRequest{Id: "gap"})
	wantStatus(t, err, codes.InvalidArgument, engine.MissingField, "quantity")
	_, err = r.readings.PostReading(ctx, &leadlinev1.PostReadingRequest{Quantity: "gap"})
	wantStatus(t, err, codes.InvalidArgument, engine.MissingField, "reading")
	_, err = r.readings.PostReadings(ctx, &leadlinev1.PostReadingsRequest{})
	wantStatus(t, err, codes.InvalidArgument, engine.MissingField, "readings")
	_, err = r.beliefs.ListBeliefs(ctx, &leadlinev1.ListBeliefsRequest{PageSize: -1})
	wantStatus(t, err, codes.InvalidArgument, engine.InvalidField, "page_size")
	big := make([]*leadlinev1.Reading, 200_000)
	for i := range big {
		big[i] = reading("some-quantity-of-the-plant", 0.8, "r")
	}
	_, err = r.readings.PostReadings(ctx, &leadlinev1.PostReadingsRequest{Readings: big})
	if status.Code(err) != codes.ResourceExhausted {
		t.Errorf("message over 4 MiB: %v", err)
	}
}

func TestHealthAndReflection(t *testing.T) {
	r := startServer(t)
	health := healthgrpc.NewHealthClient(r.conn)
	names := []string{"", "leadline.v1.QuantityService", "leadline.v1.InstrumentService", "leadline.v1.ReadingService", "leadline.v1.BeliefService"}
	for _, name := range names {
		a, err := health.Check(t.Context(), &healthgrpc.HealthCheckRequest{Service: name})
		if err != nil || a.GetStatus() != healthgrpc.HealthCheckResponse_SERVING {
			t.Errorf("%q: %v, %v", name, a, err)
		}
	}
	stream, err := reflectiongrpc.NewServerReflectionClient(r.conn).ServerReflectionInfo(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := stream.Send(&reflectiongrpc.ServerReflectionRequest{MessageRequest: &reflectiongrpc.ServerReflectionRequest_ListServices{}}); err != nil {
		t.Fatal(err)
	}
	a, err := stream.Recv()
	if err != nil {
		t.Fatal(err)
	}
	listed := map[string]bool{}
	for _, service := range a.GetListServicesResponse().GetService() {
		listed[service.GetName()] = true
	}
	for _, name := range names[1:] {
		if !listed[name] {
			t.Errorf("%s is not listed by reflection", name)
		}
	}
}

// next returns the next event of a watch, or fails the test.
func next(t testing.TB, recv func() (*leadlinev1.WatchBeliefsResponse, error)) *leadlinev1.WatchBeliefsResponse {
	t.Helper()
	event, err := recv()
	if err != nil {
		t.Fatal(err)
	}
	return event
}

func TestWatchSendsPresentBeliefsThenChanges(t *testing.T) {
	for _, protocol := range []string{"gRPC", "HTTP"} {
		t.Run(protocol, func(t *testing.T) {
			r := startServer(t)
			for _, id := range []string{"a1", "a2", "b1"} {
				r.call("PUT", "/v1/quantities/"+id, gapDeclaration).want(200)
			}
			r.call("PUT", "/v1/quantities/a0", gapDeclaration).want(200)
			r.call("DELETE", "/v1/quantities/a0", "").want(200)
			ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
			defer cancel()
			recv := r.watch(ctx, protocol, "a")
			if got := []string{next(t, recv).GetBelief().GetQuantity(), next(t, recv).GetBelief().GetQuantity()}; got[0] != "a1" || got[1] != "a2" {
				t.Fatalf("present beliefs of %v", got)
			}
			r.call("POST", "/v1/quantities/b1/readings", `{"value":0.81}`).want(200)
			posted := r.call("POST", "/v1/quantities/a2/readings", `{"value":0.82}`).want(200)
			changed := next(t, recv).GetBelief()
			if changed.GetQuantity() != "a2" || changed.GetReadingCount() != 1 {
				t.Fatalf("change %v", changed)
			}
			wantNumber(t, posted.json("belief", "mean"), changed.GetMean())
			r.call("DELETE", "/v1/quantities/a1", "").want(200)
			if got := next(t, recv).GetRetiredQuantity(); got != "a1" {
				t.Fatalf("retired %q", got)
			}
			r.call("PUT", "/v1/quantities/a1", gapDeclaration).want(200)
			if got := next(t, recv).GetBelief().GetQuantity(); got != "a1" {
				t.Fatalf("revived %q", got)
			}
			r.call("PUT", "/v1/quantities/a9", gapDeclaration).want(200)
			if got := next(t, recv).GetBelief().GetQuantity(); got != "a9" {
				t.Fatalf("new %q", got)
			}
		})
	}
}

// Many changes in a row reach a watch as few, the last one for certain.
func TestWatchConflates(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	recv := r.watch(ctx, "gRPC", "")
	next(t, recv)
	const posted = 500
	for range posted {
		r.call("POST", "/v1/quantities/gap/readings", `{"value":0.82}`).want(200)
	}
	events := 0
	for count := uint32(0); count < posted; events++ {
		belief := next(t, recv).GetBelief()
		if belief.GetReadingCount() <= count {
			t.Fatalf("event of %d readings after one of %d", belief.GetReadingCount(), count)
		}
		count = belief.GetReadingCount()
	}
	if events >= posted {
		t.Errorf("%d events for %d readings", events, posted)
	}
}
