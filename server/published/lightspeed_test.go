package published_test

import (
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// gumReadings are the twenty temperatures of JCGM 100:2008, table 1, in °C.
var gumReadings = []float64{
	96.90, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07,
	100.33, 100.42, 100.68, 100.95, 101.11, 101.20, 101.57, 101.84, 102.36, 102.72,
}

// Nothing known beforehand of level and repeatability: the belief is the t
// distribution of JCGM 101:2008, 6.4.9, with n - 1 degrees of freedom, location
// the mean and scale s / sqrt(n); its standard deviation is
// sqrt((n-1)/(n-3)) s / sqrt(n).
func TestReadingsAloneGiveTheTDistributionOfTheGUM(t *testing.T) {
	michelson := readTable(t, "morley.csv").column("Speed")
	newcomb := readTable(t, "newcomb.csv").column("newcomb")
	s := start(t)
	for _, tt := range []struct {
		name              string
		values            []float64
		location, scale   float64
		degrees, estimate float64
		deviation         float64
		lower, upper      float64
		predictive        float64 // standard deviation: s sqrt(1+1/n) sqrt((n-1)/(n-3))
		source            string
	}{
		{
			name: "michelson", values: michelson,
			location: 852.4, scale: 7.90105478190518, degrees: 99, estimate: 79.0105478190518,
			deviation: 7.98209336158064, lower: 836.722593166331, upper: 868.077406833669, predictive: 80.2190454800602,
			source: "Michelson (1880); mean and s certified for StRD Michelso, times 1000; the rest by mpmath, 30 digits",
		},
		{
			name: "newcomb", values: newcomb,
			location: 26.2121212121212, scale: 1.32265804842396, degrees: 65, estimate: 10.7453247815971,
			deviation: 1.34348859051366, lower: 23.5705906837739, upper: 28.8536517404685, predictive: 10.9969280583400,
			source: "Newcomb (1882), Stigler (1977); Gelman et al. (2013), 3.2, print 26.2, 10.8, 23.6 and 28.8, of which s and the upper limit are rounded twice; mpmath, 30 digits",
		},
		{
			name: "gum-4.4.3", values: gumReadings,
			location: 100.145, scale: 0.332915747204668, degrees: 19, estimate: 1.48884448305954,
			deviation: 0.351954626086275, lower: 99.4481993330093, upper: 100.841800666991, predictive: 1.61285871523023,
			source: "JCGM 100:2008, 4.4.3 and table 1, prints 100.145, 1.489 and 0.333; JCGM 101:2008, equation 13, for the standard deviation; mpmath, 30 digits",
		},
	} {
		t.Run(tt.name, func(t *testing.T) {
			s.declare(tt.name, `{"unit":"","repeatability":{"learned":{}}}`)
			s.postAll(readingsOf(tt.name, tt.values))
			b := s.belief(tt.name, time.Time{})
			if form := b.GetDistribution().GetForm(); form != leadlinev1.Distribution_STUDENT {
				t.Fatalf("form %v; %v", form, b)
			}
			wantNear(t, "degrees of freedom", b.GetDistribution().GetDegreesOfFreedom(), tt.degrees, 0)
			wantNear(t, "location", b.GetDistribution().GetLocation(), tt.location, 1e-14)
			wantNear(t, "scale", b.GetDistribution().GetScale(), tt.scale, 1e-13)
			wantNear(t, "mean", b.GetMean(), tt.location, 1e-14)
			wantNear(t, "standard deviation", b.GetStandardDeviation(), tt.deviation, 1e-13)
			wantNear(t, "lower", b.GetInterval().GetLower(), tt.lower, 1e-13)
			wantNear(t, "upper", b.GetInterval().GetUpper(), tt.upper, 1e-13)
			wantNear(t, "coverage probability", b.GetInterval().GetCoverageProbability(), 0.95, 0)
			wantNear(t, "estimate of the repeatability", b.GetRepeatability().GetEstimate(), tt.estimate, 1e-13)
			wantNear(t, "predictive mean", b.GetPredictive().GetMean(), tt.location, 1e-14)
			wantNear(t, "predictive standard deviation", b.GetPredictive().GetStandardDeviation(), tt.predictive, 1e-13)
			if int(b.GetReadingCount()) != len(tt.values) {
				t.Errorf("%d readings, want %d", b.GetReadingCount(), len(tt.values))
			}
		})
	}
	wantPrinted(t, "GUM mean", s.belief("gum-4.4.3", time.Time{}).GetMean(), "100.145")
	wantPrinted(t, "GUM s", s.belief("gum-4.4.3", time.Time{}).GetRepeatability().GetEstimate(), "1.489")
	wantPrinted(t, "GUM s/sqrt(n)", s.belief("gum-4.4.3", time.Time{}).GetDistribution().GetScale(), "0.333")
	wantPrinted(t, "Newcomb mean", s.belief("newcomb", time.Time{}).GetMean(), "26.2")
	wantPrinted(t, "Newcomb lower", s.belief("newcomb", time.Time{}).GetInterval().GetLower(), "23.6")
}
