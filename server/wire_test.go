package server

import (
	"math"
	"math/rand/v2"
	"testing"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/grpc/encoding"
	protocodec "google.golang.org/grpc/encoding/proto"
	"google.golang.org/grpc/mem"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// decodeGenerated decodes a batch by the generated code.
func decodeGenerated(b []byte) (wireBatch, error) {
	m := new(leadlinev1.StreamReadingsRequest)
	if err := proto.Unmarshal(b, m); err != nil {
		return wireBatch{}, err
	}
	batch := wireBatch{sequence: m.GetSequence()}
	batch.readings, batch.err = readingsOf(m.GetReadings())
	return batch, nil
}

func diffBatches(a, b wireBatch) string {
	text := func(err error) string {
		if err == nil {
			return ""
		}
		return err.Error()
	}
	if d := cmp.Diff(text(a.err), text(b.err)); d != "" || a.err != nil {
		return d
	}
	bits := cmp.Comparer(func(x, y float64) bool { return math.Float64bits(x) == math.Float64bits(y) })
	return cmp.Diff(a.sequence, b.sequence) + cmp.Diff(a.readings, b.readings, bits)
}

// checkBatch compares the codec with the generated code on one message.
func checkBatch(t *testing.T, b []byte) {
	t.Helper()
	codec := readingCodec{encoding.GetCodecV2(protocodec.Name)}
	want, wantErr := decodeGenerated(b)
	var got wireBatch
	gotErr := codec.Unmarshal(mem.BufferSlice{mem.SliceBuffer(b)}, &got)
	if (gotErr != nil) != (wantErr != nil) {
		t.Fatalf("%x: error %v, generated code: %v", b, gotErr, wantErr)
	}
	if d := diffBatches(want, got); wantErr == nil && d != "" {
		t.Fatalf("%x: (-generated +codec)\n%s", b, d)
	}
}

func randomBatch(random *rand.Rand) *leadlinev1.StreamReadingsRequest {
	some := func(n int) bool { return random.IntN(n) > 0 }
	texts := []string{"", "gap", "hall/3 µ", "\xff", string(make([]byte, 300))}
	pick := func() string {
		if some(20) {
			return texts[1]
		}
		return texts[random.IntN(len(texts))]
	}
	m := &leadlinev1.StreamReadingsRequest{Sequence: random.Uint64() >> random.IntN(64)}
	for range random.IntN(4) {
		r := &leadlinev1.Reading{Quantity: pick(), ReadingId: pick()}
		if some(20) {
			indicate(r, random)
		}
		if !some(4) {
			r.SampleCount = new(random.Uint32() >> random.IntN(33))
		}
		if some(4) {
			r.Time = &timestamppb.Timestamp{Seconds: random.Int64() >> random.IntN(64), Nanos: random.Int32() >> random.IntN(32)}
		}
		if some(2) {
			r.Unit, r.Instrument, r.Occasion, r.RandomStandardUncertainty = pick(), pick(), pick(), new(random.Float64())
		}
		m.Readings = append(m.Readings, r)
	}
	return m
}

// indicate sets one of the fields of an indication, and now and then another too.
func indicate(r *leadlinev1.Reading, random *rand.Rand) {
	x := func() *float64 { return new(math.Ldexp(random.NormFloat64(), random.IntN(40))) }
	switch random.IntN(6) {
	case 0:
		r.Above = x()
	case 1:
		r.Below = x()
	case 2:
		r.Between = &leadlinev1.Reading_Between{Lower: x(), Upper: x()}
		if random.IntN(8) == 0 {
			r.Between.Upper = nil
		}
	default:
		r.Value = x()
	}
	if random.IntN(20) == 0 {
		indicate(r, random)
	}
}

// TestCodecTakesEveryIndication: were it to give up on one, the answers would still
// be right and only slow.
func TestCodecTakesEveryIndication(t *testing.T) {
	for _, r := range []*leadlinev1.Reading{
		{Quantity: "gap", Value: new(0.83), SampleCount: new(uint32(600))},
		{Quantity: "gap", Above: new(40.0)},
		{Quantity: "gap", Below: new(0.0)},
		{Quantity: "gap", Between: &leadlinev1.Reading_Between{Lower: new(18.0), Upper: new(20.0)}},
	} {
		b, err := proto.Marshal(&leadlinev1.StreamReadingsRequest{Readings: []*leadlinev1.Reading{r}})
		if err != nil {
			t.Fatal(err)
		}
		if _, ok := scanBatch(b); !ok {
			t.Errorf("the codec gave up on %v", r)
		}
		checkBatch(t, b)
	}
}

// TestCodecReadsWhatGeneratedCodeReads compares both on batches at random, as
// they are and with bytes changed, cut off, doubled or put in another order.
func TestCodecReadsWhatGeneratedCodeReads(t *testing.T) {
	random := rand.New(rand.NewPCG(3, 4))
	plain := 0
	for range 3000 {
		m := randomBatch(random)
		b, err := proto.MarshalOptions{AllowPartial: true}.Marshal(m)
		if err != nil {
			continue // invalid UTF-8, which only a changed byte can bring about
		}
		if _, ok := scanBatch(b); ok {
			plain++
		}
		checkBatch(t, b)
		if len(b) == 0 {
			continue
		}
		changed := append([]byte(nil), b...)
		changed[random.IntN(len(b))] ^= 1 << random.IntN(8)
		checkBatch(t, changed)
		checkBatch(t, b[:random.IntN(len(b))])
		checkBatch(t, append(append([]byte(nil), b...), b...))
	}
	if plain < 500 {
		t.Errorf("only %d batches were of the plain shape", plain)
	}
}

// TestCorpusThroughTheWire sends each body of the corpus that decodes as a message too:
// both codecs have to read from it what the JSON says.
func TestCorpusThroughTheWire(t *testing.T) {
	for _, c := range readCorpus(t, `"quantity":"gap",`) {
		body := []byte(`{"readings":[` + c.body + `]}`)
		want, jsonErr := decodeReadingsStrictly(body)
		m := new(leadlinev1.PostReadingsRequest)
		if err := decodeStrict(body, m, false); err != nil {
			continue // it has no message
		}
		b, err := proto.Marshal(&leadlinev1.StreamReadingsRequest{Readings: m.GetReadings()})
		if err != nil {
			t.Fatal(err)
		}
		checkBatch(t, b)
		got, err := decodeGenerated(b)
		if err != nil {
			t.Fatal(err)
		}
		if d := diffBatches(wireBatch{readings: want, err: jsonErr}, got); d != "" {
			t.Errorf("line %d (-JSON +message)\n%s", c.line, d)
		}
	}
}

func FuzzScanBatch(f *testing.F) {
	random := rand.New(rand.NewPCG(5, 6))
	for range 20 {
		if b, err := proto.Marshal(randomBatch(random)); err == nil {
			f.Add(b)
		}
	}
	f.Fuzz(checkBatch)
}

// TestAnswerIsWhatGeneratedCodeWrites compares the bytes.
func TestAnswerIsWhatGeneratedCodeWrites(t *testing.T) {
	long := string(make([]byte, 500))
	answer := &wireAnswer{sequence: 1<<63 + 5, results: []engine.Result{
		{ReadingID: "a", Time: 1_700_000_000_123_456_789, Status: engine.Applied, Position: 7},
		{Time: 0, Status: engine.Duplicate},
		{ReadingID: engine.ReadingID(long[:128]), Time: -1, Status: engine.Refused, Reason: engine.ReadingIDConflict, Detail: long},
		{ReadingID: "b", Time: engine.MaxInstant, Status: engine.Refused, Reason: engine.UnknownQuantity, Detail: "µ"},
		{Time: math.MinInt64, Status: engine.Refused, Reason: engine.TimeOutOfRange, Detail: long[:100]},
	}}
	for len(answer.results) < 300 { // indices of two bytes
		answer.results = append(answer.results, answer.results[:5]...)
	}
	n := countResults(answer.results)
	want, err := proto.MarshalOptions{Deterministic: true}.Marshal(&leadlinev1.StreamReadingsResponse{
		Sequence: answer.sequence, Results: resultMessages(answer.results),
		AppliedCount: n.applied, DuplicateCount: n.duplicate, RefusedCount: n.refused,
	})
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(want, answer.append(nil)); d != "" {
		t.Errorf("(-generated +codec)\n%s", d)
	}
	if most := answer.mostBytes(); len(want) > most {
		t.Errorf("%d bytes, thought to be at most %d", len(want), most)
	}
}
