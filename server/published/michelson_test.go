package published_test

import (
	"fmt"
	"math"
	"math/big"
	"strings"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// acceptedSpeed is what Michelson's apparatus should have given, the speed of light
// in his air, in km/s less 299000 (Stigler 1977, Annals of Statistics 5, table 5).
const acceptedSpeed = 734.5

// run is one of Michelson's five series of twenty. The table has no times; those of
// this test are made up and keep its order.
type run struct {
	begins time.Time
	values []float64
}

func michelsonRuns(t *testing.T) []run {
	morley := readTable(t, "morley.csv")
	numbers, speeds := morley.column("Expt"), morley.column("Speed")
	runs := make([]run, 5)
	for i, speed := range speeds {
		r := &runs[int(numbers[i])-1]
		r.values = append(r.values, speed)
	}
	for i := range runs {
		runs[i].begins = time.Date(1879, 6, 5+5*i, 0, 0, 0, 0, time.UTC)
		if len(runs[i].values) != 20 {
			t.Fatalf("series %d has %d values", i+1, len(runs[i].values))
		}
	}
	return runs
}

// spreads returns the standard deviation r within a series, pooled, and that
// between series, u, from the mean squares of a one-way layout with n values each:
//
//	r^2 = MS_within,  u^2 = (MS_between - MS_within) / n
//
// Source: ISO 5725-2 and JCGM 100:2008, H.5.2 (from memory).
func spreads(runs []run) (r, u float64) {
	n, k := float64(len(runs[0].values)), float64(len(runs))
	var within, all, between float64
	var means []float64
	for _, s := range runs {
		mean := 0.0
		for _, v := range s.values {
			mean += v / n
		}
		for _, v := range s.values {
			within += square(v-mean) / (k * (n - 1))
		}
		means, all = append(means, mean), all+mean/k
	}
	for _, mean := range means {
		between += n * square(mean-all) / (k - 1)
	}
	return math.Sqrt(within), math.Sqrt((between - within) / n)
}

// Michelson's five series, once as a hundred readings of no instrument, once by an
// instrument calibrated before the first series, once by one calibrated before each.
// What has to hold is that the belief is the joint normal law conditioned on
// all readings, found here by elimination in 60-digit arithmetic. The accepted value
// need not lie inside: the uncertainty declared of a bias is the spread between
// the series themselves, which is blind to what all five share.
func TestMichelsonsSeriesAsFiveCalibrations(t *testing.T) {
	s := start(t)
	runs := michelsonRuns(t)
	r, u := spreads(runs)
	wantPrinted(t, "within a series", r, "74.2") // the roots of the mean square 5511 and of (23629 - 5511)/20, by hand
	wantPrinted(t, "between series", u, "30.1")
	t.Logf("a reading repeats within %.1f, a bias is uncertain by %.1f km/s: both from the data's own analysis of variance (ISO 5725-2)", r, u)
	for i, tt := range []struct {
		name         string
		calibrations int
	}{{"naive", 0}, {"one calibration", 1}, {"five calibrations", 5}} {
		id := fmt.Sprint("light-", i)
		s.declare(id, `{"unit":"km/s","repeatability":{"standard_deviation":`+number(r)+`}}`)
		instrument := s.declareMirror(id, runs[:tt.calibrations], u)
		all := shuffledSpeeds(id, instrument, runs)
		s.postHTTP(all[:50])
		s.postGRPC(all[50:])
		b := s.belief(id, time.Time{})
		if b.GetReadingCount() != 100 {
			t.Fatalf("%s: %d readings", tt.name, b.GetReadingCount())
		}
		want := conditioned(runs, tt.calibrations, r, u)
		wantNear(t, tt.name+": mean", b.GetMean(), want.mean, 1e-12)
		wantNear(t, tt.name+": standard deviation", b.GetStandardDeviation(), want.sd, 1e-12)
		// 1.959963984540054 is the quantile 0.975 (Abramowitz and Stegun 1964, table 26.5).
		lower, upper := want.mean-1.959963984540054*want.sd, want.mean+1.959963984540054*want.sd
		wantNear(t, tt.name+": lower", b.GetInterval().GetLower(), lower, 1e-12)
		wantNear(t, tt.name+": upper", b.GetInterval().GetUpper(), upper, 1e-12)
		wantLastBias(t, b, tt.calibrations, want)
		t.Logf("%-17s %.2f +- %5.2f, 95 %% interval %.1f to %.1f; the accepted %.1f lies inside: %v",
			tt.name, b.GetMean(), b.GetStandardDeviation(), b.GetInterval().GetLower(), b.GetInterval().GetUpper(),
			acceptedSpeed, lower <= acceptedSpeed && acceptedSpeed <= upper)
	}
}

// declareMirror declares an instrument that is calibrated before each of the
// runs; without any there is none, and its name is empty.
func (s *service) declareMirror(id string, runs []run, u float64) (instrument string) {
	s.t.Helper()
	if len(runs) == 0 {
		return ""
	}
	var calibrations []string
	for _, r := range runs {
		calibrations = append(calibrations, fmt.Sprintf(`{"valid_from":%q,"bias_standard_uncertainty":%s}`, rfc3339(r.begins), number(u)))
	}
	s.call("PUT", "/v1/instruments/mirror-of-"+id, `{"unit":"km/s","calibrations":[`+strings.Join(calibrations, ",")+`]}`).ok()
	return "mirror-of-" + id
}

// shuffledSpeeds are the readings in random order.
func shuffledSpeeds(id, instrument string, runs []run) []posted {
	var all []posted
	for i, r := range runs {
		for k, v := range r.values {
			all = append(all, posted{
				Quantity: id, Value: v, Instrument: instrument, ID: fmt.Sprintf("series %d, %d", i+1, k+1),
				Time: rfc3339(r.begins.Add(time.Duration(k+1) * time.Hour)),
			})
		}
	}
	newRand(1).Shuffle(len(all), func(i, k int) { all[i], all[k] = all[k], all[i] })
	return all
}

// wantLastBias checks the bias that the belief still has, that of the last
// calibration.
func wantLastBias(t *testing.T, b *leadlinev1.Belief, calibrations int, want law) {
	t.Helper()
	if len(b.GetBiases()) != min(calibrations, 1) {
		t.Fatalf("biases %v", b.GetBiases())
	}
	for _, bias := range b.GetBiases() {
		if math.Abs(bias.GetMean()-want.bias) > 1e-11*want.biasSD {
			t.Errorf("bias %v, want %v", bias.GetMean(), want.bias)
		}
		wantNear(t, "uncertainty of the bias", bias.GetStandardDeviation(), want.biasSD, 1e-12)
	}
}

// law is the posterior of the level and of the last calibration's bias.
type law struct{ mean, sd, bias, biasSD float64 }

const bitsOf60Digits = 200

func exact(x float64) *big.Float { return new(big.Float).SetPrec(bitsOf60Digits).SetFloat64(x) }

// conditioned finds the law given all readings y at once. With V their covariance
// given the level, r^2 on the diagonal and u^2 between any two that share a bias,
// and w = 1'V^-1 1, the flat level has mean m = 1'V^-1 y / w and variance 1/w;
// the bias, of which c = u^2 (1 where it counts, else 0) is the covariance with y,
//
//	E b = c'V^-1 (y - m),  Var b = u^2 - c'V^-1 c + (c'V^-1 1)^2 / w
//
// (generalised least squares: Rao 1973, Linear Statistical Inference, 4a.2 and 4a.11, from memory).
func conditioned(runs []run, calibrations int, r, u float64) law {
	var rows [][]*big.Float // V | 1 | y | c
	groupOf := func(run int) int { return min(run, calibrations-1) }
	for i, a := range runs {
		for n := range a.values {
			var row []*big.Float
			for j, b := range runs {
				for m := range b.values {
					v := exact(0)
					if calibrations > 0 && groupOf(i) == groupOf(j) {
						v.Add(v, new(big.Float).Mul(exact(u), exact(u)))
					}
					if i == j && n == m {
						v.Add(v, new(big.Float).Mul(exact(r), exact(r)))
					}
					row = append(row, v)
				}
			}
			c := exact(0)
			if calibrations > 0 && groupOf(i) == calibrations-1 {
				c.Mul(exact(u), exact(u))
			}
			rows = append(rows, append(row, exact(1), exact(a.values[n]), c))
		}
	}
	dots := eliminate(rows)
	f := func(i, j int) float64 { x, _ := dots[i][j].Float64(); return x }
	m := new(big.Float).Quo(dots[0][1], dots[0][0])
	bias := new(big.Float).Sub(dots[2][1], new(big.Float).Mul(m, dots[2][0]))
	out := law{sd: math.Sqrt(1 / f(0, 0)), biasSD: math.Sqrt(u*u - f(2, 2) + square(f(2, 0))/f(0, 0))}
	out.mean, _ = m.Float64()
	out.bias, _ = bias.Float64()
	return out
}

// eliminate returns the products a'V^-1 b of three columns beside the symmetric
// matrix V: the triangle V = L D L' turns them to L^-1 a, so each is a sum over
// the pivots d of (L^-1 a)(L^-1 b) / d.
func eliminate(rows [][]*big.Float) (dots [3][3]*big.Float) {
	n := len(rows)
	for i := range dots {
		for j := range dots {
			dots[i][j] = exact(0)
		}
	}
	for p, pivot := range rows {
		for i := range dots {
			for j := range dots {
				term := new(big.Float).Mul(pivot[n+i], pivot[n+j])
				dots[i][j].Add(dots[i][j], term.Quo(term, pivot[p]))
			}
		}
		for _, row := range rows[p+1:] {
			if row[p].Sign() == 0 {
				continue
			}
			factor := new(big.Float).Quo(row[p], pivot[p])
			for j := p; j < n+3; j++ {
				if pivot[j].Sign() != 0 {
					row[j].Sub(row[j], new(big.Float).Mul(factor, pivot[j]))
				}
			}
		}
	}
	return dots
}
