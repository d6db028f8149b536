package modelcheck_test

import (
	"math"
	"testing"
	"unsafe"

	"leadline.example/engine/modelcheck"
)

// A tally is part of every quantity's state.
func TestTallyIsSmall(t *testing.T) {
	if size := unsafe.Sizeof(modelcheck.Tally{}); size > 192 {
		t.Errorf("a tally takes %d bytes", size)
	}
}

func TestAddDoesNotAllocate(t *testing.T) {
	law := eager(16)
	var tally modelcheck.Tally
	at := int64(0)
	allocations := testing.AllocsPerRun(1000, func() {
		tally.Add(&law, modelcheck.ScoreAt(3), at)
		tally.Add(&law, modelcheck.Score{Lower: -1, Upper: 2}, at)
		at += hour
	})
	if allocations != 0 {
		t.Errorf("%v allocations", allocations)
	}
}

// Every sum of the report from the scores of two windows and a half, anew.
func TestReportSums(t *testing.T) {
	rng := source(t)
	law := modelcheck.LawOf(modelcheck.Settings{Window: 16})
	z := make([]float64, 40)
	var tally modelcheck.Tally
	for i := range z {
		z[i] = 1.5 * rng.NormFloat64()
		tally.Add(&law, modelcheck.ScoreAt(z[i]), int64(i)*hour)
	}
	r := tally.Report(&law)
	total, last := sums(z), sums(z[16:32])
	for _, test := range []struct {
		name      string
		got, want float64
	}{
		{"total 50 %", r.Total.Within50, total.within50 / 40},
		{"total 95 %", r.Total.Within95, total.within95 / 40},
		{"total mean square", r.Total.MeanSquare, total.square / 40},
		{"window 50 %", r.Window.Within50, last.within50 / 16},
		{"window 95 %", r.Window.Within95, last.within95 / 16},
		{"window mean square", r.Window.MeanSquare, last.square / 16},
		{"lag 1", r.Lag1, last.lag / last.square},
		{"narrow", r.Tests[0].Statistic, last.square},
		{"wide", r.Tests[1].Statistic, last.square},
		{"serial", r.Tests[2].Statistic, last.lag / last.square},
		{"narrow probability", r.Tests[0].Probability, chiSquaredAbove(16, last.square)},
		{"wide probability", r.Tests[1].Probability, 1 - chiSquaredAbove(16, last.square)},
	} {
		near(t, test.name, test.got, test.want, 1e-12)
	}
	if r.Total.Readings != 40 || r.Window.Readings != 16 || r.Last != modelcheck.ScoreAt(z[39]) {
		t.Errorf("%+v", r)
	}
}

type sum struct{ square, lag, within50, within95 float64 }

func sums(z []float64) sum {
	var s sum
	for i, v := range z {
		s.square += v * v
		if i > 0 {
			s.lag += v * z[i-1]
		}
		if math.Abs(v) <= 0.6744897501960817 {
			s.within50++
		}
		if math.Abs(v) <= 1.959963984540054 {
			s.within95++
		}
	}
	return s
}

// The window that fills counts scored readings only, and is empty after each look.
func TestFilledCountsSinceTheLastLook(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{Window: 16})
	var tally modelcheck.Tally
	for i := range 50 {
		if got := tally.Filled(); got != i%16 || tally.Looked() != (i >= 16) {
			t.Errorf("after %d scored readings: %d, %v", i, got, tally.Looked())
		}
		tally.Pass(int64(2*i) * hour)
		tally.Add(&law, modelcheck.ScoreAt(1), int64(2*i+1)*hour)
	}
}

// What one window finds stands until the next is full, and no longer.
func TestObjectionsStandForAWindow(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{Window: 16, ObjectionsPerYear: 1})
	var tally modelcheck.Tally
	at := int64(0)
	add := func(z float64) modelcheck.Result {
		at += 24 * hour
		tally.Add(&law, modelcheck.ScoreAt(z), at)
		return tally.Result(&law)
	}
	signs := []float64{1, 1, -1, -1} // whose products of neighbours cancel
	for i := range 80 {
		scale := []float64{3, 1, 0.1, 1, 1}[i/16]
		z := scale * signs[i%4]
		if i >= 48 && i < 64 {
			z = scale // all alike
		}
		want := modelcheck.TooFew
		if i >= 15 {
			want = []modelcheck.Result{modelcheck.IntervalsTooNarrow, modelcheck.NoObjection, modelcheck.IntervalsTooWide, modelcheck.Serial, modelcheck.NoObjection}[(i-15)/16]
		}
		if got := add(z); got != want {
			t.Fatalf("after reading %d: %v, want %v", i+1, got, want)
		}
	}
	if r := tally.Report(&law); r.Raised != 3 || len(r.Objections) != 0 {
		t.Errorf("raised %d, standing %v", r.Raised, r.Objections)
	}
}

// Of several objections the one is the result whose probability is least of its level; those of
// the window leave the prior's alone.
func TestGravestObjectionIsTheResult(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{Window: 16})
	for _, test := range []struct {
		prior, score float64
		want         modelcheck.Result
	}{
		{5, 6, modelcheck.IntervalsTooNarrow},
		{30, 6, modelcheck.PriorConflict},
		{5, 1, modelcheck.Serial}, // as far as it goes: 15/16 of 0.98
	} {
		var tally modelcheck.Tally
		tally.Prior(&law, 1, test.prior, 1, 0)
		for i := range int64(16) {
			tally.Add(&law, modelcheck.ScoreAt(test.score), i*24*hour)
		}
		r := tally.Report(&law)
		least := math.Inf(1)
		var want modelcheck.Result
		for _, x := range r.Tests {
			if x.Objects() && x.Probability/x.Level < least {
				least, want = x.Probability/x.Level, x.Objection
			}
		}
		if r.Result != test.want || want != test.want || tally.Result(&law) != test.want || len(r.Objections) < 2 {
			t.Errorf("%+v: %v of %v", test, r.Result, r.Tests)
		}
		tally.Renewed()
		if got := tally.Report(&law); got.Raised != r.Raised || len(got.Objections) != len(r.Objections)-1 || len(got.Tests) != 3 {
			t.Errorf("after a renewal: %+v", got)
		}
	}
}

// The prior is looked at after 1, 2, 4 ... readings until it is settled.
func TestPriorLooks(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	for _, test := range []struct {
		name string
		r    float64 // in units of the prior's standard deviation
		want []int   // looks
	}{
		{"settled at once", 0.1, []int{1}},
		{"half at 1, the rest at 32", 1, []int{1, 2, 4, 8, 16, 32}},
		{"half at 16, the rest at 64", 3, []int{1, 2, 4, 8, 16, 32, 64}},
		{"half at 128", 10, []int{1, 2, 4, 8, 16, 32, 64, 128}},
	} {
		var tally modelcheck.Tally
		var looks []int
		for n := 0; n <= 1000; n++ {
			if tally.PriorLook(n) {
				looks = append(looks, n)
				tally.Prior(&law, n, 0.1, 1, 1/(1+float64(n)/(test.r*test.r)))
			}
		}
		if len(looks) != len(test.want) || looks[len(looks)-1] != test.want[len(test.want)-1] {
			t.Errorf("%s: looked at %v, want %v", test.name, looks, test.want)
		}
		if tests := tally.Report(&law).Tests; len(tests) != 1 || tests[0].Objection != modelcheck.PriorConflict {
			t.Errorf("%s: tests %v", test.name, tests)
		}
	}
}

// Without a variance that readings have taken at least half of, a prior isn't judged.
func TestPriorIsNotJudgedTooEarly(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	for _, test := range []struct{ before, after float64 }{{1, 0.51}, {math.Inf(1), 1}, {1, 1.1}, {math.NaN(), 1}, {1, math.NaN()}} {
		var tally modelcheck.Tally
		tally.Prior(&law, 1, 100, test.before, test.after)
		if r := tally.Report(&law); r.Result != modelcheck.TooFew || len(r.Tests) != 0 {
			t.Errorf("%+v: %+v", test, r)
		}
	}
}

// A reading without a score moves no sum.
func TestReadingsWithoutScore(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	var with, without modelcheck.Tally
	with.Pass(1)
	without.Pass(1)
	with.Add(&law, modelcheck.ScoreOf(math.NaN(), math.NaN()), 2)
	with.Pass(3)
	if _, ok := with.Tail(); ok || with != without {
		t.Errorf("%+v, want %+v", with, without)
	}
	with.Add(&law, modelcheck.ScoreAt(2), 4)
	if p, ok := with.Tail(); !ok || math.Abs(p-math.Erfc(math.Sqrt2)) > 1e-15 {
		t.Errorf("tail %v, %v", p, ok)
	}
}

func TestResultsHaveWords(t *testing.T) {
	seen := map[string]bool{}
	for _, r := range modelcheck.Results {
		if w := r.String(); w == "UNSPECIFIED" || seen[w] {
			t.Errorf("result %d is called %s", r, w)
		} else {
			seen[w] = true
		}
	}
}

// Settings left out are the defaults.
func TestDefaultLaw(t *testing.T) {
	explicit := modelcheck.Settings{
		Window: modelcheck.DefaultWindow, ObjectionsPerYear: modelcheck.DefaultObjectionsPerYear, FalseAlarmInterval: modelcheck.DefaultFalseAlarmInterval,
	}
	law := modelcheck.LawOf(modelcheck.Settings{})
	if law != modelcheck.LawOf(explicit) || law.Settings() != explicit {
		t.Errorf("%+v", law.Settings())
	}
}
