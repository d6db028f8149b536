package modelcheck_test

import (
	"testing"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// Michelson's 100 values of the speed of light (1880), in the order in which NIST StRD has them, which
// certifies a lag-1 autocorrelation of 0.535 199 668 621 283 about their mean. Held by a level
// that stays, of unknown repeatability, they raise SERIAL in the first window if one was read a day,
// and don't if one was read a minute, which in a year would be too many looks for that.
func TestMichelsonIsSerial(t *testing.T) {
	const minute = hour / 60
	values := table(t, "published/strd_michelso.csv")
	mean := 0.0
	for _, row := range values {
		mean += row[0] / float64(len(values))
	}
	var deviations []float64
	for _, row := range values {
		deviations = append(deviations, row[0]-mean)
	}
	s := sums(deviations)
	near(t, "lag-1 autocorrelation", s.lag/s.square, 0.535199668621283, 1e-9)

	for _, test := range []struct {
		name string
		step int64
		want modelcheck.Result
	}{{"a day", 24 * hour, modelcheck.Serial}, {"a minute", minute, modelcheck.NoObjection}} {
		law := modelcheck.LawOf(modelcheck.Settings{})
		var k posterior.Constant
		var tally modelcheck.Tally
		for i, row := range values {
			next := k.Predictive(posterior.Prior{Vague: true}, posterior.Noise{})
			if i < 2 {
				tally.Pass(int64(i) * test.step)
			} else {
				tally.Add(&law, modelcheck.ScoreOf(next.LowerTail(row[0]), next.UpperTail(row[0])), int64(i)*test.step)
			}
			k.AddLearned(row[0])
		}
		r := tally.Report(&law)
		t.Logf("one in %s: %v, %+v, coverage %+v", test.name, r.Result, r.Tests, r.Total)
		if r.Result != test.want {
			t.Errorf("one in %s: %v, want %v", test.name, r.Result, test.want)
		}
		near(t, "probability", r.Tests[2].Probability, 2*serialAbove(t, independent(modelcheck.DefaultWindow), r.Lag1), 1e-6)
	}
}
