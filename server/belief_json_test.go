package server

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/reflect/protoreflect"
	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// TestAppendBeliefWritesWhatProtojsonWrites compares the hand-written JSON of
// beliefs with protojson's, over messages in which every field, also one yet to
// be declared, is set or not at random.
func TestAppendBeliefWritesWhatProtojsonWrites(t *testing.T) {
	random := rand.New(rand.NewPCG(1, 2))
	for _, chance := range []float64{0, 0.5, 0.8, 1} {
		for range 200 {
			m := new(leadlinev1.Belief)
			fill(m.ProtoReflect(), random, chance)
			want, err := marshalJSON(m)
			if err != nil {
				t.Fatal(err)
			}
			if got := append(appendBelief(nil, m), '\n'); string(got) != string(want) {
				t.Fatalf("chance of a field %v, PCG(1, 2): (-protojson +by hand)\n%s", chance, cmp.Diff(string(want), string(got)))
			}
		}
	}
}

// fill sets each field of a message with some chance.
func fill(m protoreflect.Message, random *rand.Rand, chance float64) {
	fields := m.Descriptor().Fields()
	for i := range fields.Len() {
		f := fields.Get(i)
		switch {
		case random.Float64() >= chance:
		case f.IsList():
			fillList(m.Mutable(f).List(), f, random, chance)
		case f.Message() == nil:
			m.Set(f, scalar(f, random))
		case f.Message().FullName() == "google.protobuf.Timestamp":
			m.Set(f, protoreflect.ValueOfMessage(randomTime(random).ProtoReflect()))
		case f.Message().FullName() == durationName:
			m.Set(f, protoreflect.ValueOfMessage(randomDuration(random).ProtoReflect()))
		default:
			fill(m.Mutable(f).Message(), random, chance)
		}
	}
}

func fillList(l protoreflect.List, f protoreflect.FieldDescriptor, random *rand.Rand, chance float64) {
	for range random.IntN(3) {
		if f.Message() == nil {
			l.Append(scalar(f, random))
		} else {
			fill(l.AppendMutable().Message(), random, chance)
		}
	}
}

func randomTime(random *rand.Rand) proto.Message {
	return timestamp(engine.Instant(randomNanos(random)))
}

func randomDuration(random *rand.Rand) proto.Message {
	return durationpb.New(time.Duration(randomNanos(random)))
}

// randomNanos returns a number of nanoseconds with 0, 3, 6 or 9 decimals in seconds.
func randomNanos(random *rand.Rand) int64 {
	nanos := random.Int64N(1e18)
	for _, unit := range []int64{1e9, 1e6, 1e3} {
		if random.IntN(2) == 0 {
			nanos -= nanos % unit
		}
	}
	return nanos
}

func scalar(f protoreflect.FieldDescriptor, random *rand.Rand) protoreflect.Value {
	switch f.Kind() {
	case protoreflect.DoubleKind:
		edges := []float64{0, math.Copysign(0, -1), 1, -0.95, 1e-6, 9.99e-7, 1e21, 9.99e20, 1e-9, 1.25e-10, 5e-324, math.MaxFloat64, 1e100}
		if i := random.IntN(2 * len(edges)); i < len(edges) {
			return protoreflect.ValueOfFloat64(edges[i])
		}
		return protoreflect.ValueOfFloat64(math.Ldexp(random.NormFloat64(), random.IntN(400)-200))
	case protoreflect.StringKind:
		texts := []string{"", "gap", "µm/m", `a"b\c`, "a\x01\n\x1f\x7f", "\u2028</script>&", "水"}
		return protoreflect.ValueOfString(texts[random.IntN(len(texts))])
	case protoreflect.BoolKind:
		return protoreflect.ValueOfBool(random.IntN(2) == 0)
	case protoreflect.EnumKind:
		values := f.Enum().Values()
		return protoreflect.ValueOfEnum(values.Get(random.IntN(values.Len())).Number())
	case protoreflect.Uint32Kind:
		return protoreflect.ValueOfUint32(random.Uint32())
	case protoreflect.Uint64Kind:
		return protoreflect.ValueOfUint64(random.Uint64())
	}
	panic("a belief has a field of kind " + f.Kind().String() + "; teach the test to fill it")
}
