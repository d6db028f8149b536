package published_test

import (
	"math"
	"strconv"
	"testing"
	"time"
)

// year is the mean Gregorian year, 365.2425 days.
const year = 31556952 * time.Second

// yearly are the times of the Nile's readings, a year apart.
func yearly(n int) []time.Time {
	first := time.Date(1871, 1, 1, 0, 0, 0, 0, time.UTC)
	var all []time.Time
	for i := range n {
		all = append(all, first.Add(time.Duration(i)*year))
	}
	return all
}

func timedReadings(id string, values []float64, times []time.Time) []posted {
	all := readingsOf(id, values)
	for i := range all {
		all[i].Time, all[i].ID = rfc3339(times[i]), "r"+strconv.Itoa(i)
	}
	return all
}

// number writes a number so that it is read back with the same bits.
func number(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }

// The local level model on the Nile, variances 15099 and 1469.1 a year (Durbin
// and Koopman 2012, 2.2.5), at every step: filtered level and variance at the
// reading, forecast with its variance, and that of the next indication, just
// before the one after. The tables are by mpmath with 40 digits and print 10
// to 13 of them; they end at the book's 798.37 and 4032.16.
func TestNileAtEveryStep(t *testing.T) {
	s := start(t)
	for _, tt := range []struct {
		name, table, prior string
		source             string
	}{
		{
			name: "from-wide-prior", table: "nile_filter_a0_P1e7.csv",
			prior:  `"prior":{"mean":0,"standard_deviation":` + number(math.Sqrt(1e7)) + `,"time":"1871-01-01T00:00:00Z"},`,
			source: "a_1 = 0, P_1 = 1e7: Durbin and Koopman (2012), 2.2.5",
		},
		{
			name: "from-nothing", table: "nile_filter_diffuse.csv",
			source: "exact diffuse start, a_2 = y_1, P_2 = 15099 + 1469.1: Durbin and Koopman (2012), 2.9 and 5.2",
		},
	} {
		t.Run(tt.name, func(t *testing.T) {
			nile := readTable(t, tt.table)
			values, times := nile.column("y"), yearly(len(nile.rows))
			s.declare(tt.name, `{"unit":"hm³",`+tt.prior+`"repeatability":{"standard_deviation":`+number(math.Sqrt(15099))+`},
				"dynamics":{"random_walk":{"standard_deviation":`+number(math.Sqrt(1469.1))+`,"per":"31556952s"}}}`)
			s.postAll(timedReadings(tt.name, values, times))
			level, variance := nile.column("m"), nile.column("C")
			for i, at := range times {
				b := s.belief(tt.name, at)
				step := "m of step " + strconv.Itoa(i+1)
				wantNear(t, step, b.GetMean(), level[i], 1e-12)
				wantNear(t, "C"+step[1:], square(b.GetStandardDeviation()), variance[i], 1e-12)
				if int(b.GetReadingCount()) != i+1 || !b.GetLastReadingTime().AsTime().Equal(at) {
					t.Errorf("at step %d the belief has %d readings up to %v", i+1, b.GetReadingCount(), b.GetLastReadingTime().AsTime())
				}
			}
			forecast, forecastVariance, indicationVariance := nile.column("a"), nile.column("P"), nile.column("F")
			for i := 1; i < len(times); i++ { // the widening of the missing nanosecond is 1e-17 of it
				b := s.belief(tt.name, times[i].Add(-1))
				step := " of step " + strconv.Itoa(i+1)
				wantNear(t, "a"+step, b.GetMean(), forecast[i], 1e-12)
				wantNear(t, "P"+step, square(b.GetStandardDeviation()), forecastVariance[i], 1e-12)
				wantNear(t, "F"+step, square(b.GetPredictive().GetStandardDeviation()), indicationVariance[i], 1e-12)
			}
			last := s.belief(tt.name, times[len(times)-1])
			wantPrinted(t, "level of 1970", last.GetMean(), "798.37")
			wantPrinted(t, "variance of 1970", square(last.GetStandardDeviation()), "4032.158")
		})
	}
}

func square(x float64) float64 { return x * x }

// The first example of a local level of West and Harrison (1997), 2.3, table
// 2.1: m_0 = 130, C_0 = 400, V = 100, W = 5. The table was computed with rounded
// numbers carried forward, so it is recomputed without, to 12 digits.
func TestKuritDriftsBetweenReadings(t *testing.T) {
	kurit := readTable(t, "kurit.csv")
	before := noon.AddDate(0, 0, -20)
	var times []time.Time
	for i := range kurit.rows {
		times = append(times, before.AddDate(0, 0, i+1))
	}
	s := start(t)
	s.declare("kurit", `{"unit":"","prior":{"mean":130,"standard_deviation":20,"time":"`+rfc3339(before)+`"},
		"repeatability":{"standard_deviation":10},
		"dynamics":{"random_walk":{"standard_deviation":`+number(math.Sqrt(5))+`,"per":"86400s"}}}`)
	s.postAll(timedReadings("kurit", kurit.column("y"), times))
	level, variance, forecast, indication := kurit.column("m"), kurit.column("c"), kurit.column("f"), kurit.column("q")
	for i, at := range times {
		ahead := s.belief("kurit", at.Add(-1))
		wantNear(t, "f", ahead.GetMean(), forecast[i], 1e-11)
		wantNear(t, "Q", square(ahead.GetPredictive().GetStandardDeviation()), indication[i], 1e-11)
		b := s.belief("kurit", at)
		wantNear(t, "m", b.GetMean(), level[i], 1e-11)
		wantNear(t, "C", square(b.GetStandardDeviation()), variance[i], 1e-11)
	}
	// Printed, as remembered, and the same whether rounded on the way or not.
	first := s.belief("kurit", times[0])
	wantPrinted(t, "m of step 1", first.GetMean(), "146")
	wantPrinted(t, "C of step 1", square(first.GetStandardDeviation()), "80")
	// A long silence widens the belief without bound: C + 5 a day.
	late := s.belief("kurit", times[8].AddDate(0, 0, 1000))
	wantNear(t, "C after 1000 days", square(late.GetStandardDeviation()), variance[8]+5000, 1e-11)
	wantNear(t, "m after 1000 days", late.GetMean(), level[8], 1e-11)
}
