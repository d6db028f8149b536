package published_test

import (
	"cmp"
	"math"
	"math/big"
	"slices"
	"strings"
	"testing"
	"time"
)

// drawn is a reading with what a generative model needs to know of it, found here
// anew from what was posted.
type drawn struct {
	posted
	at          float64 // hours since midnight of 1 March 2026
	calibration int     // of its instrument
	visit       int     // numbered by the instrument's readings in order; those of one visit share an error
}

var midnight = time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC)

func hours(t time.Time) float64 { return t.Sub(midnight).Hours() }

// drawnFrom sorts readings and numbers calibrations and visits: a visit ends when the
// occasion changes, and a reading without one is a visit of its own.
func drawnFrom(readings []posted) []drawn {
	slices.SortFunc(readings, func(a, b posted) int { return cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(a.ID, b.ID)) })
	last, visits := map[string]string{}, map[string]int{}
	var all []drawn
	for _, p := range readings {
		at, err := time.Parse(time.RFC3339Nano, p.Time)
		if err != nil {
			panic(err) // a test's own time
		}
		d := drawn{posted: p, at: hours(at)}
		if p.Instrument == "probe-1" && d.at >= 10 {
			d.calibration = 1
		}
		if p.Occasion == "" || p.Occasion != last[p.Instrument] {
			visits[p.Instrument]++
		}
		last[p.Instrument], d.visit = p.Occasion, visits[p.Instrument]
		all = append(all, d)
	}
	return all
}

// process is the law of a level, at times in hours. Flat says that the level at the
// origin is unknown, on top of mean and covariance.
type process struct {
	flat       bool
	mean       func(t float64) float64
	covariance func(s, t float64) float64
}

// processes restates the dynamics of movingQuantities, the bearing replaced at a
// quarter past eleven, by textbook covariances: a Wiener process has q min(s, t), an
// integrated one w a^2 (3 b - a) / 6 with a = min and b = max, and an Ornstein-Uhlenbeck
// process v exp(-rate |s - t|) (Rasmussen and Williams 2006, Gaussian Processes for
// Machine Learning, 4.2 and 6.3, from memory).
func processes(first float64) map[string]process {
	zero := func(float64) float64 { return 0 }
	trend := func(from, variance float64) func(s, t float64) float64 {
		return func(s, t float64) float64 {
			a, b := min(s, t)-from, max(s, t)-from
			return variance + 0.2*0.2*a*b + 0.1*0.1*a + 0.05*0.05*a*a*(3*b-a)/6
		}
	}
	const renewal = 11.25
	before, after := trend(8, 4), trend(renewal, 0.3*0.3)
	return map[string]process{
		"ice-water/bath": {mean: zero, covariance: func(_, _ float64) float64 { return 1 }},
		"store-1/air":    {flat: true, mean: zero, covariance: func(s, t float64) float64 { return 0.25 * (min(s, t) - first) }},
		"brine/return":   {mean: zero, covariance: func(s, t float64) float64 { return math.Exp(-math.Ln2 / 0.5 * math.Abs(s-t)) }},
		"compressor-2/bearing": {
			mean: func(t float64) float64 {
				if t < renewal {
					return 0.1 * (t - 8)
				}
				return 0.2 + 0.1*(t-renewal)
			},
			covariance: func(s, t float64) float64 {
				switch {
				case max(s, t) < renewal:
					return before(s, t)
				case min(s, t) >= renewal:
					return after(s, t)
				}
				return 0
			},
		},
	}
}

// errorsOf is the mean and the covariance of the errors of two readings, restated from
// the certificates of thermometers: probe-1 and probe-2 only, which are exact.
func errorsOf(a, b *drawn, same bool) (bias, covariance float64) {
	type certificate struct{ bias, own, common float64 }
	first := []certificate{{0.1, math.Sqrt(0.2*0.2 - 0.05*0.05), 0.05}, {-0.1, math.Sqrt(0.15*0.15 - 0.1*0.1), 0.1}}
	second := certificate{0, math.Sqrt(0.1*0.1 - 0.05*0.05), 0.05}
	of := func(d *drawn) certificate {
		switch d.Instrument {
		case "probe-1":
			return first[d.calibration]
		case "probe-2":
			return second
		}
		return certificate{}
	}
	bias, covariance = of(a).bias, of(a).common*of(b).common
	if a.Instrument != b.Instrument {
		return bias, covariance
	}
	if a.calibration == b.calibration {
		covariance += of(a).own * of(a).own
	}
	white := 0.0
	switch a.Instrument {
	case "probe-1":
		white = 0.1 * 0.1
		covariance += 0.2 * 0.2 * math.Exp(-math.Abs(a.at-b.at)*6) // correlation time 10 min
	case "probe-2":
		white = 0.15*0.15 + 0.1*0.1/12
		covariance += 0.1 * 0.1 * (28 + min(a.at, b.at)/24) // since 1 February
		if a.visit == b.visit {
			covariance += 0.2 * 0.2
		}
	}
	if a.Uncertainty != nil {
		white = square(*a.Uncertainty)
	}
	if same {
		covariance += white
	}
	return bias, covariance
}

// given conditions the level at an instant on all readings at once, in 60-digit
// arithmetic; see conditioned for the formulas.
func (p process) given(all []drawn, at float64) (mean, sd float64) {
	var rows [][]*big.Float // V | 1 if flat, else 0 | y less its mean | covariance with the level
	for i := range all {
		var row []*big.Float
		for j := range all {
			_, v := errorsOf(&all[i], &all[j], i == j)
			row = append(row, exact(p.covariance(all[i].at, all[j].at)+v))
		}
		bias, _ := errorsOf(&all[i], &all[i], true)
		one := 0.0
		if p.flat {
			one = 1
		}
		rows = append(rows, append(row, exact(one), exact(all[i].Value-bias-p.mean(all[i].at)), exact(p.covariance(all[i].at, at))))
	}
	dots := eliminate(rows)
	f := func(i, j int) float64 { x, _ := dots[i][j].Float64(); return x }
	mean, variance := p.mean(at)+f(1, 2), p.covariance(at, at)-f(2, 2)
	if p.flat {
		start, rest := f(0, 1)/f(0, 0), 1-f(0, 2)
		mean, variance = mean+start*rest, variance+square(rest)/f(0, 0)
	}
	return mean, math.Sqrt(variance)
}

// Shuffled, late, repeated, killed in between, renewed: what the service believes is
// what a joint normal law of level, slope, biases, correlated noise and occasions says
// given all readings at once. The law is written down here from the declarations, as
// covariances between readings, with neither states nor steps.
func TestMovingBeliefsAreTheExactPosterior(t *testing.T) {
	for _, seed := range seeds(3) {
		all := slices.DeleteFunc(movingReadings(seed), func(p posted) bool { return p.Instrument == "probe-3" })
		shuffled := slices.Clone(all)
		newRand(seed+200).Shuffle(len(shuffled), func(i, k int) { shuffled[i], shuffled[k] = shuffled[k], shuffled[i] })
		s := startMoving(t)
		half := len(shuffled) / 2
		s.postPieces(shuffled[:half], 0)
		s.renew("bearing-7", "11:15:00", `{"mean":0.2,"standard_deviation":0.3}`)
		s = s.afterCrash("half way")
		s.postPieces(shuffled[half-10:], 10)
		for _, q := range movingQuantities {
			readings := drawnFrom(slices.DeleteFunc(slices.Clone(all), func(p posted) bool { return p.Quantity != q.id }))
			law := processes(readings[0].at)[q.id]
			for _, at := range []time.Time{noon.Add(-2 * time.Hour), noon.Add(-40 * time.Minute), noon.Add(time.Hour)} {
				known := slices.Clone(readings)
				known = slices.DeleteFunc(known, func(d drawn) bool { return strings.Compare(d.Time, rfc3339(at)) > 0 })
				mean, sd := law.given(known, hours(at))
				b := s.belief(q.id, at)
				if int(b.GetReadingCount()) != len(known) {
					t.Fatalf("seed %d: %s at %v has %d readings, want %d", seed, q.id, at, b.GetReadingCount(), len(known))
				}
				if math.Abs(b.GetMean()-mean) > 1e-9*sd || math.Abs(b.GetStandardDeviation()-sd) > 1e-9*sd {
					t.Errorf("seed %d: %s at %v is believed %v +- %v, the exact posterior is %v +- %v", seed, q.id, at, b.GetMean(), b.GetStandardDeviation(), mean, sd)
				}
			}
		}
	}
}
