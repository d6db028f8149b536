package posterior_test

import (
	"bytes"
	"testing"

	"leadline.example/engine/posterior"
)

// states are encodings to start from.
func states() (constants, walks [][]byte) {
	var k posterior.Constant
	var w posterior.Walk
	constants, walks = append(constants, k.AppendBinary(nil)), append(walks, w.AppendBinary(nil))
	p := posterior.NewWalk(posterior.Prior{Mean: -3, SD: 2})
	walks = append(walks, p.AppendBinary(nil))
	for i, y := range []float64{0, -1, 1e9 + 0.1, 1e100, 1e-100} {
		k.AddKnown(y, 0.3)
		constants = append(constants, k.AppendBinary(nil))
		k.AddLearned(y + float64(i))
		constants = append(constants, k.AppendBinary(nil))
		p.Predict(0.1)
		p.Update(y, 0.3)
		walks = append(walks, p.AppendBinary(nil))
	}
	return constants, walks
}

func TestStatesComeBackBitForBit(t *testing.T) {
	constants, walks := states()
	for _, b := range constants {
		k, err := posterior.DecodeConstant(b)
		if err != nil || !bytes.Equal(k.AppendBinary(nil), b) {
			t.Errorf("constant %x came back as %x, %v", b, k.AppendBinary(nil), err)
		}
		// What follows must be appended, what precedes kept.
		if got := k.AppendBinary([]byte("head")); !bytes.Equal(got[4:], b) || string(got[:4]) != "head" {
			t.Errorf("appended %x", got)
		}
	}
	for _, b := range walks {
		w, err := posterior.DecodeWalk(b)
		if err != nil || !bytes.Equal(w.AppendBinary(nil), b) {
			t.Errorf("walk %x came back as %x, %v", b, w.AppendBinary(nil), err)
		}
	}
}

func TestDamagedStatesAreRefused(t *testing.T) {
	constants, walks := states()
	good := constants[len(constants)-1]
	notFinite := bytes.Clone(good)
	copy(notFinite[9:], []byte{0, 0, 0, 0, 0, 0, 0xf0, 0x7f}) // +Inf as an origin
	negative := bytes.Clone(good)
	negative[8] = 0x80 // a negative count
	for name, b := range map[string][]byte{
		"empty": nil, "short": good[:len(good)-1], "long": append(bytes.Clone(good), 0),
		"version": append([]byte{99}, good[1:]...), "infinite": notFinite, "negative count": negative,
	} {
		if _, err := posterior.DecodeConstant(b); err == nil {
			t.Errorf("constant, %s: no error", name)
		}
	}
	walk := walks[len(walks)-1]
	vagueWithMean := bytes.Clone(walk)
	vagueWithMean[1] = 0
	for name, b := range map[string][]byte{
		"empty": nil, "short": walk[:len(walk)-1], "version": append([]byte{99}, walk[1:]...), "vague with a mean": vagueWithMean,
	} {
		if _, err := posterior.DecodeWalk(b); err == nil {
			t.Errorf("walk, %s: no error", name)
		}
	}
}

func FuzzDecodeConstant(f *testing.F) {
	constants, _ := states()
	for _, b := range constants {
		f.Add(b)
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		k, err := posterior.DecodeConstant(b)
		if err != nil {
			if k != (posterior.Constant{}) {
				t.Error("a state and an error")
			}
			return
		}
		if got := k.AppendBinary(nil); !bytes.Equal(got, b) {
			t.Errorf("%x came back as %x", b, got)
		}
	})
}

func FuzzDecodeWalk(f *testing.F) {
	_, walks := states()
	for _, b := range walks {
		f.Add(b)
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		w, err := posterior.DecodeWalk(b)
		if err != nil {
			if w != (posterior.Walk{}) {
				t.Error("a state and an error")
			}
			return
		}
		if got := w.AppendBinary(nil); !bytes.Equal(got, b) {
			t.Errorf("%x came back as %x", b, got)
		}
	})
}
