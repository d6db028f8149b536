package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// Durbin & Koopman (2012), 2.4 and 2.9, on the Nile; the tables hold 13 digits.
func TestNileSmoother(t *testing.T) {
	walk := posterior.Motion{Form: posterior.MotionWalk, Walk: 1469.1}
	for _, c := range []struct {
		file  string
		start posterior.Prior
	}{
		{"published/nile_filter_a0_P1e7.csv", posterior.Prior{SD: math.Sqrt(1e7)}},
		{"published/nile_filter_diffuse.csv", vaguePrior()},
	} {
		rows := table(t, c.file)
		series := make([]posterior.SeriesReading, len(rows))
		for i, row := range rows {
			series[i] = posterior.SeriesReading{After: min(1, float64(i)), Value: number(t, row[2]), Variance: 15099}
		}
		for i, s := range posterior.Smooth(walk, c.start, posterior.SlopePrior{}, series) {
			sd := s.Level.Scale()
			near(t, fmt.Sprint(c.file, " ", rows[i][1], ": mean"), s.Level.Location(), number(t, rows[i][10]), 4e-12)
			near(t, fmt.Sprint(c.file, " ", rows[i][1], ": variance"), sd*sd, number(t, rows[i][11]), 4e-12)
			if s.Slope.Form() != posterior.FormNone {
				t.Fatal("a walk has a slope")
			}
		}
	}
}

// Series with gaps, read at uneven times, under every motion: what is known of each time in
// hindsight is what conditioning it on all readings gives.
func TestSmootherAgainstConditioning(t *testing.T) {
	random := source(t)
	for form, name := range []string{"constant", "walk", "trend", "reverting"} {
		for n := range 15 {
			l := newLife(posterior.MotionForm(form), random)
			l.spread = 2
			series := make([]posterior.SeriesReading, 3+random.IntN(12))
			times := make([]sight, len(series))
			for i := range series {
				r := posterior.SeriesReading{After: math.Exp(random.NormFloat64()), Value: l.centre(), Variance: math.Pow(l.width(), 2)}
				if i > 0 && random.IntN(4) == 0 {
					r.Variance = math.Inf(1)
				}
				l.now = add(l.now, num(r.After))
				series[i], times[i] = r, sight{at: l.now, level: 1, variance: r.Variance, y: r.Value}
				if !math.IsInf(r.Variance, 1) {
					l.told.seen = append(l.told.seen, times[i])
				}
			}
			start := l.told.levels[0]
			for i, s := range posterior.Smooth(l.told.motion, start.prior, start.slope, series) {
				mean, variance := l.told.ask(&times[i])
				sd, _ := none().Sqrt(variance).Float64()
				m, _ := s.Level.Mean()
				got, _ := s.Level.StandardDeviation()
				if d := off(m, mean, sd) - 2*math.Abs(m)*0x1p-52/sd; !(d <= 1e-9) {
					t.Errorf("%s %d, %d of %d: mean off by %v sd", name, n, i, len(series), d)
				}
				near(t, fmt.Sprintf("%s %d, %d of %d: sd", name, n, i, len(series)), got, sd, 1e-9)
			}
		}
	}
}

// A trend without noise of its own is a straight line: what the smoother says of its slope is the same
// at every time, and is that of least squares with the prior as one more reading.
func TestSmoothedSlopeOfALine(t *testing.T) {
	values := []float64{1.2, 1.9, 3.4, 3.9, 5.3}
	var series []posterior.SeriesReading
	weight, moment := 1/0.25, 0.5/0.25 // of the prior 0.5 +- 0.5
	for i, y := range values {
		series = append(series, posterior.SeriesReading{After: 2, Value: y, Variance: 0.04})
		x := 2 * (float64(i) - 2) // from the middle: the mean of y says nothing of the slope
		weight, moment = weight+x*x/0.04, moment+x*y/0.04
	}
	line := posterior.Motion{Form: posterior.MotionTrend}
	for i, s := range posterior.Smooth(line, vaguePrior(), posterior.SlopePrior{Mean: 0.5, SD: 0.5}, series) {
		near(t, fmt.Sprint("slope at ", i), s.Slope.Location(), moment/weight, 1e-12)
		near(t, fmt.Sprint("its sd at ", i), s.Slope.Scale(), 1/math.Sqrt(weight), 1e-12)
	}
}
