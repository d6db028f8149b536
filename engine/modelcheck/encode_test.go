package modelcheck_test

import (
	"bytes"
	"testing"

	"leadline.example/engine/modelcheck"
)

// busy is a tally of which every field has a value.
func busy(t *testing.T, law *modelcheck.Law) modelcheck.Tally {
	rng := source(t)
	var tally modelcheck.Tally
	tally.Prior(law, 1, 9, 1, 0.01)
	for i := range int64(1000) {
		z := modelcheck.ScoreAt(3 * rng.NormFloat64())
		if i%3 == 0 {
			z.Upper += 0.5
		}
		tally.Add(law, z, 1.7e18+i*hour)
	}
	return tally
}

// A tally read back is the one written, and goes on as that.
func TestTallyRoundTrip(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	for _, tally := range []modelcheck.Tally{{}, busy(t, &law)} {
		b := tally.AppendBinary([]byte("x"))[1:]
		got, err := modelcheck.DecodeTally(b)
		if err != nil || got != tally || len(b) != modelcheck.TallyBytes {
			t.Errorf("%v, %d bytes:\n%+v, want\n%+v", err, len(b), got, tally)
		}
		got.Add(&law, modelcheck.ScoreAt(1), 1.8e18)
		tally.Add(&law, modelcheck.ScoreAt(1), 1.8e18)
		if !bytes.Equal(got.AppendBinary(nil), tally.AppendBinary(nil)) {
			t.Error("it goes on otherwise")
		}
	}
}

// Bytes are refused that no tally has, and what is accepted encodes to the same bytes.
func FuzzDecodeTally(f *testing.F) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	var tally modelcheck.Tally
	f.Add(tally.AppendBinary(nil))
	for i := range int64(70) {
		tally.Add(&law, modelcheck.ScoreAt(float64(i%5)), i*hour)
	}
	f.Add(tally.AppendBinary(nil))
	f.Fuzz(func(t *testing.T, b []byte) {
		got, err := modelcheck.DecodeTally(b)
		if err != nil && got != (modelcheck.Tally{}) {
			t.Fatalf("%+v with %v", got, err)
		}
		if err == nil && !bytes.Equal(got.AppendBinary(nil), b) {
			t.Fatal("another encoding")
		}
	})
}

func TestDecodeTallyRefuses(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	tally := busy(t, &law)
	good := tally.AppendBinary(nil)
	change := func(at int, v byte) []byte {
		b := bytes.Clone(good)
		b[at] = v
		return b
	}
	last := len(good) - 1
	for name, b := range map[string][]byte{
		"nothing": nil, "short": good[:last], "long": append(bytes.Clone(good), 0), "another version": change(0, 2),
		"flags": change(last, 4), "objections": change(last-1, 1), "stage": change(last-2, 9), "direction": change(last-3, 3),
		"a score that isn't finite": change(8, 0x7f),
		"a full window that fills":  change(last-4, 0xff),
	} {
		if name == "a score that isn't finite" {
			b[7] = 0xf0
		}
		if got, err := modelcheck.DecodeTally(b); err == nil || got != (modelcheck.Tally{}) {
			t.Errorf("%s: %+v, %v", name, got, err)
		}
	}
}
