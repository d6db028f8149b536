package server

import (
	"math"
	"testing"
)

func TestNumbersAreRoundedToTheirUncertainty(t *testing.T) {
	const gum = "JCGM 100:2008, 7.2.6"
	for _, tt := range []struct {
		name             string
		value, u         float64
		wantValue, wantU string
		source           string
	}{
		{"resistance", 10.05762, 0.027, "10.058", "0.027", gum + ": y = 10,057 62 ohm, u = 27 mohm, y rounded to 10,058 ohm"},
		{"resistance in milliohm", 10057.62, 27, "10058", "27", gum + ": the same in milliohm"},
		{"frequency", 1200, 28.05, "1200", "28", gum + ": u = 28,05 kHz rounded down to 28 kHz"},
		{"to nearest where up is allowed", 512.26, 10.47, "512", "10", gum + ": 10,47 mohm might be rounded up to 11 mohm; nearest is this page's rule"},
		{"mass", 100.02147, 0.00035, "100.02147", "0.00035", "JCGM 100:2008, 7.2.2: 100,021 47 g with 0,35 mg"},
		{"uncertainty gains a digit", 0.8123, 0.0996, "0.81", "0.10", "by hand: 0.0996 to two digits is 0.10"},
		{"uncertainty gains a digit before the point", 81.23, 9.96, "81", "10", "by hand: 9.96 to two digits is 10"},
		{"uncertainty of 1", 0.8123, 1, "0.8", "1.0", "by hand"},
		{"hundreds", 123456, 1234, "123500", "1200", "by hand: both to hundreds"},
		{"value below its uncertainty", 40, 1234, "0", "1200", "by hand: 40 to hundreds"},
		{"value above half the place", 60, 1234, "100", "1200", "by hand: 60 to hundreds"},
		{"negative, above half the place", -60, 1234, "-100", "1200", "by hand: -60 to hundreds"},
		{"carry over", 99960, 1234, "100000", "1200", "by hand: 99960 to hundreds"},
		{"minus nothing", -0.001, 0.5, "0.00", "0.50", "by hand: no sign on 0"},
		{"zero", 0, 0.012, "0.000", "0.012", "by hand"},
		{"tiny", 1.23456e-11, 2.7e-13, "1.235e-11", "2.7e-13", "by hand: both to 1e-14"},
		{"huge uncertainty", 1.23456e20, 2.7e18, "1.235e+20", "2.7e+18", "by hand: both to 1e17"},
		{"huge value", 2e15, 0.5, "2.00000000000000000e+15", "0.50", "by hand: both to hundredths"},
		{"tiny value, huge uncertainty", 3, 2.7e18, "0", "2.7e+18", "by hand"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			last, ok := uncertaintyPlace(tt.u)
			if !ok {
				t.Fatalf("no place for u = %g", tt.u)
			}
			if got := roundTo(tt.value, last); got != tt.wantValue {
				t.Errorf("value %g is shown as %s, want %s (%s)", tt.value, got, tt.wantValue, tt.source)
			}
			if got := roundTo(tt.u, last); got != tt.wantU {
				t.Errorf("u = %g is shown as %s, want %s (%s)", tt.u, got, tt.wantU, tt.source)
			}
		})
	}
}

func TestNoPlaceWithoutUncertainty(t *testing.T) {
	for _, u := range []float64{0, -1, math.NaN(), math.Inf(1)} {
		if last, ok := uncertaintyPlace(u); ok {
			t.Errorf("u = %g has place %d, want none", u, last)
		}
	}
}

func TestProbabilityKeepsWhatIsUncertain(t *testing.T) {
	for _, tt := range []struct {
		name string
		p    float64
		want string
		why  string
	}{
		{"impossible", 0, "0", "exact"},
		{"certain", 1, "1", "exact"},
		{"far tail", 2.43e-35, "2.4e-35", "two digits"},
		{"small", 0.0416, "0.042", "two digits"},
		{"half", 0.5, "0.50", "two digits"},
		{"above half", 0.744, "0.74", "two digits of 0.256"},
		{"high", 0.99958, "0.99958", "two digits of 0.00042"},
		{"nearly certain", 1 - 0x1p-52, "0.99999999999999978", "never shown as 1"},
		{"rounds up to a digit more", 0.0996, "0.10", "two digits"},
		{"below a thousandth", 0.00099, "9.9e-04", "two digits"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if got := probabilityText(tt.p); got != tt.want {
				t.Errorf("%v is shown as %s, want %s: %s", tt.p, got, tt.want, tt.why)
			}
		})
	}
}
