package server

import (
	"bytes"
	"compress/gzip"
	"errors"
	"io"
	"math"
	"strconv"
	"strings"
	"testing"

	dto "github.com/prometheus/client_model/go"
	"github.com/prometheus/common/expfmt"
	"github.com/prometheus/common/model"

	"leadline.example/engine"
	"leadline.example/engine/decide"
)

// published is a quantity as the page sees it.
type published struct {
	*quantityLabels
	engine.Figures
}

// quantityWith returns an invented quantity.
func quantityWith(id, unit, description string) published {
	q := &engine.Quantity{
		ID: engine.QuantityID(id),
		Declaration: engine.Declaration{
			Unit: unit, Description: description,
			Tolerance: engine.Tolerance{HasLower: true, Lower: 0.7, HasUpper: true, Upper: 0.9},
		},
	}
	return published{
		quantityLabels: labelsOf(q),
		Figures: engine.Figures{
			ReadingCount: 12, HasLast: true, LastTime: 1772366400_250000000,
			HasMean: true, Mean: 0.8123, HasStandardDeviation: true, StandardDeviation: 0.0071,
			HasInterval: true, Lower: 0.7984, Upper: 0.8262,
			HasBreach: true, Breach: engine.Breach{Below: 1.2e-56, Above: 2.4e-35, Either: 2.4e-35, Conformance: 1},
			Verdict: decide.Conforms,
			Check: engine.CheckFigures{
				Result: "NO_OBJECTION", HasCoverage: true, Coverage50: 0.48, Coverage95: 0.9375, MeanSquare: 1.07, Steps: 2, Outlying: 1,
			},
		},
	}
}

// expose writes the quantities in three parts.
func expose(quantities []published) *exposition {
	x := newExposition(3)
	for i := range quantities {
		var n numberTexts
		n.update(&quantities[i].Figures)
		x.parts[i*3/len(quantities)].quantity(quantities[i].quantityLabels, &n)
	}
	return x
}

func renderQuantities(t testing.TB, quantities []published) string {
	t.Helper()
	var out bytes.Buffer
	if err := expose(quantities).send(&out); err != nil {
		t.Fatal(err)
	}
	return out.String()
}

func parsePage(t testing.TB, text string) map[string]*dto.MetricFamily {
	t.Helper()
	parser := expfmt.NewTextParser(model.UTF8Validation)
	families, err := parser.TextToMetricFamilies(strings.NewReader(text))
	if err != nil {
		t.Fatalf("the page can't be parsed: %v", err)
	}
	return families
}

// seriesOf maps name{label=value,...} to the value, as an independent parser
// reads the page.
func seriesOf(t testing.TB, text string) map[string]float64 {
	t.Helper()
	out := map[string]float64{}
	for name, f := range parsePage(t, text) {
		for _, m := range f.GetMetric() {
			var labels []string
			for _, l := range m.GetLabel() {
				labels = append(labels, l.GetName()+"="+l.GetValue())
			}
			key := name + "{" + strings.Join(labels, ",") + "}"
			if _, double := out[key]; double {
				t.Errorf("series %s is published twice", key)
			}
			switch {
			case f.GetType() == dto.MetricType_COUNTER:
				out[key] = m.GetCounter().GetValue()
			case f.GetType() == dto.MetricType_GAUGE:
				out[key] = m.GetGauge().GetValue()
			}
		}
	}
	return out
}

func TestPageCarriesWhatABeliefSays(t *testing.T) {
	got := seriesOf(t, renderQuantities(t, []published{quantityWith("pump-3.gap", "mm", "coupling gap")}))
	want := map[string]float64{
		"leadline_quantity_info{quantity=pump-3.gap,unit=mm,description=coupling gap}":             1,
		"leadline_posterior_mean{quantity=pump-3.gap,unit=mm}":                                     0.8123,
		"leadline_posterior_standard_deviation{quantity=pump-3.gap,unit=mm}":                       0.0071,
		"leadline_posterior_interval_lower{quantity=pump-3.gap,unit=mm,coverage_probability=0.95}": 0.7984,
		"leadline_posterior_interval_upper{quantity=pump-3.gap,unit=mm,coverage_probability=0.95}": 0.8262,
		"leadline_breach_probability{quantity=pump-3.gap,side=below}":                              1.2e-56,
		"leadline_breach_probability{quantity=pump-3.gap,side=above}":                              2.4e-35,
		"leadline_breach_probability{quantity=pump-3.gap,side=either}":                             2.4e-35,
		"leadline_tolerance_limit{quantity=pump-3.gap,unit=mm,side=lower}":                         0.7,
		"leadline_tolerance_limit{quantity=pump-3.gap,unit=mm,side=upper}":                         0.9,
		"leadline_verdict{quantity=pump-3.gap,verdict=CONFORMS}":                                   1,
		"leadline_verdict{quantity=pump-3.gap,verdict=BREACHES}":                                   0,
		"leadline_verdict{quantity=pump-3.gap,verdict=INCONCLUSIVE}":                               0,
		"leadline_quantity_readings_total{quantity=pump-3.gap}":                                    12,
		"leadline_last_reading_timestamp_seconds{quantity=pump-3.gap}":                             1772366400.25,
		"leadline_model_check{quantity=pump-3.gap,result=NO_OBJECTION}":                            1,
		"leadline_predictive_coverage{quantity=pump-3.gap,coverage_probability=0.5}":               0.48,
		"leadline_predictive_coverage{quantity=pump-3.gap,coverage_probability=0.95}":              0.9375,
		"leadline_normal_score_mean_square{quantity=pump-3.gap}":                                   1.07,
		"leadline_steps_total{quantity=pump-3.gap}":                                                2,
		"leadline_outlying_readings_total{quantity=pump-3.gap}":                                    1,
	}
	for k, v := range want {
		if g, ok := got[k]; !ok || g != v {
			t.Errorf("%s is %v (published: %t), want %v", k, g, ok, v)
		}
	}
	if len(got) != len(want) {
		t.Errorf("%d series are published, want %d: %v", len(got), len(want), got)
	}
	if len(got) != 21 {
		t.Errorf("a quantity without a horizon has %d series, the page of DEVELOPERS.md says 21", len(got))
	}
}

// The median is there where it is reached within the declared horizon.
func TestPageLooksAheadWhereDeclared(t *testing.T) {
	q := quantityWith("winch.lining", "mm", "")
	without := len(seriesOf(t, renderQuantities(t, []published{q})))
	q.HasHorizon, q.HorizonProbability = true, 0.25
	got := seriesOf(t, renderQuantities(t, []published{q}))
	if p, ok := got["leadline_breach_within_horizon_probability{quantity=winch.lining}"]; !ok || p != 0.25 || len(got) != without+1 {
		t.Errorf("%d series with a horizon, %d without: %v", len(got), without, got)
	}
	q.HorizonProbability, q.HasMedian, q.MedianSeconds = 0.75, true, 86400.5
	got = seriesOf(t, renderQuantities(t, []published{q}))
	if s, ok := got["leadline_median_time_to_breach_seconds{quantity=winch.lining}"]; !ok || s != 86400.5 || len(got) != without+2 {
		t.Errorf("%d series with a median, %d without: %v", len(got), without, got)
	}
}

// Before the first scored reading there is a result and no share.
func TestPageShowsOneResultOfAModelCheck(t *testing.T) {
	q := quantityWith("winch.lining", "mm", "")
	q.Check = engine.CheckFigures{Result: "TOO_FEW"}
	got := seriesOf(t, renderQuantities(t, []published{q}))
	for key, want := range map[string]float64{
		"leadline_model_check{quantity=winch.lining,result=TOO_FEW}": 1,
		"leadline_steps_total{quantity=winch.lining}":                0,
		"leadline_outlying_readings_total{quantity=winch.lining}":    0,
	} {
		if v, ok := got[key]; !ok || v != want {
			t.Errorf("%s is %v (published: %t), want %v", key, v, ok, want)
		}
	}
	for key := range got {
		if strings.HasPrefix(key, "leadline_predictive_coverage") || strings.HasPrefix(key, "leadline_normal_score") || strings.Contains(key, "NO_OBJECTION") {
			t.Errorf("%s is published", key)
		}
	}
}

func TestPageLeavesOutWhatDoesNotExist(t *testing.T) {
	q := quantityWith("winch.rope", "mm", "")
	q.limits, q.Figures = nil, engine.Figures{}
	got := seriesOf(t, renderQuantities(t, []published{q}))
	want := map[string]float64{
		"leadline_quantity_info{quantity=winch.rope,unit=mm,description=}": 1,
		"leadline_quantity_readings_total{quantity=winch.rope}":            0,
	}
	if len(got) != len(want) {
		t.Errorf("published are %v, want only %v", got, want)
	}
	for k, v := range want {
		if g, ok := got[k]; !ok || g != v {
			t.Errorf("%s is %v (published: %t), want %v", k, g, ok, v)
		}
	}
}

func TestPageKeepsEveryBitOfANumber(t *testing.T) {
	for _, tt := range []struct {
		name  string
		value float64
		why   string
	}{
		{"third", 1.0 / 3, "endless in decimals"},
		{"smallest", math.SmallestNonzeroFloat64, "denormal"},
		{"greatest", math.MaxFloat64, "309 digits"},
		{"negative zero", math.Copysign(0, -1), "has a sign"},
		{"tail", 1e-300, "breach probabilities reach it"},
		{"whole", 123456789, "written without exponent"},
		{"whole beyond 2^53", 1 << 60, "more digits than a float64 has"},
		{"negative whole", -40, "written without exponent"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			q := quantityWith("room", "Cel", "")
			q.Mean = tt.value
			got := seriesOf(t, renderQuantities(t, []published{q}))["leadline_posterior_mean{quantity=room,unit=Cel}"]
			if math.Float64bits(got) != math.Float64bits(tt.value) {
				t.Errorf("%v comes back as %v (%s)", tt.value, got, tt.why)
			}
		})
	}
}

func TestNumbersFollowTheBelief(t *testing.T) {
	first := quantityWith("q", "mm", "").Figures
	greatest, least, above := first, first, first
	greatest.Mean, greatest.StandardDeviation, greatest.Lower, greatest.Upper = -math.MaxFloat64, math.MaxFloat64, -1.2345678901234567e-300, math.SmallestNonzeroFloat64
	greatest.HorizonProbability, greatest.MedianSeconds = -math.MaxFloat64, -1.2345678901234567e-300
	greatest.Check.Coverage50, greatest.Check.Coverage95, greatest.Check.MeanSquare = math.MaxFloat64, -1.2345678901234567e-300, math.SmallestNonzeroFloat64
	least.Breach = engine.Breach{Below: 0.25, Either: 0.25, Above: 0}
	above.Breach = engine.Breach{Below: 0, Either: 0.25, Above: 0.25}
	var n numberTexts
	for i, f := range []engine.Figures{first, first, greatest, least, above, first} {
		n.update(&f)
		for number, want := range [numberCount]float64{f.Mean, f.StandardDeviation, f.Lower, f.Upper, f.Breach.Below, f.Breach.Either, f.Breach.Above, f.HorizonProbability, f.MedianSeconds, f.Check.Coverage50, f.Check.Coverage95, f.Check.MeanSquare} {
			if got, err := strconv.ParseFloat(string(n.text(number)), 64); err != nil || got != want {
				t.Errorf("belief %d: number %d is written %q, want %v", i, number, n.text(number), want)
			}
		}
	}
}

func TestPageWritesMomentsInSeconds(t *testing.T) {
	for _, tt := range []struct {
		name string
		at   engine.Instant
		want string
	}{
		{"whole", 1772366400_000000000, "1772366400"},
		{"quarter", 1772366400_250000000, "1772366400.25"},
		{"a millisecond", 1772366400_001000000, "1772366400.001"},
		{"a nanosecond", 1772366400_000000001, "1772366400.000000001"},
		{"before 1970", -1_500000000, "-1.5"},
		{"1970", 0, "0"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if got := string(appendSeconds(nil, tt.at)); got != tt.want {
				t.Errorf("%d ns is written %s, want %s", tt.at, got, tt.want)
			}
		})
	}
}

func TestPageEscapesLabels(t *testing.T) {
	for _, tt := range []struct{ name, description, want string }{
		{"quote", `the "old" pump`, `the "old" pump`},
		{"backslash", `C:\ice`, `C:\ice`},
		{"line feed", "first\nsecond", "first\nsecond"},
		{"backslash before n", `\n`, `\n`},
		{"not UTF-8", "a\xffb", "a\uFFFDb"},
		{"forged series", "\"} 1\nleadline_ready 0", "\"} 1\nleadline_ready 0"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			page := renderQuantities(t, []published{quantityWith("q", "mm", tt.description)})
			info := parsePage(t, page)["leadline_quantity_info"].GetMetric()
			if len(info) != 1 {
				t.Fatalf("%d series of leadline_quantity_info, want 1:\n%s", len(info), page)
			}
			for _, l := range info[0].GetLabel() {
				if l.GetName() == "description" && l.GetValue() != tt.want {
					t.Errorf("description comes back as %q, want %q", l.GetValue(), tt.want)
				}
			}
		})
	}
}

func TestPageKeepsFamiliesTogether(t *testing.T) {
	page := renderQuantities(t, []published{quantityWith("a", "mm", ""), quantityWith("b", "Cel", ""), quantityWith("c", "m3/h", "")})
	seen := map[string]bool{}
	var open string
	for line := range strings.Lines(page) {
		name := strings.FieldsFunc(strings.TrimPrefix(strings.TrimPrefix(line, "# HELP "), "# TYPE "),
			func(r rune) bool { return r == '{' || r == ' ' })[0]
		if name == open {
			continue
		}
		if seen[name] {
			t.Fatalf("metric %s is opened again at %q", name, line)
		}
		seen[name], open = true, name
	}
	if len(seen) != int(metricCount) {
		t.Errorf("%d metrics, want %d", len(seen), int(metricCount))
	}
}

func TestPageIsTheSameCompressed(t *testing.T) {
	quantities := make([]published, 500)
	for i := range quantities {
		quantities[i] = quantityWith("room-"+string(rune('a'+i%26))+strings.Repeat("x", i/26), "Cel", "store room")
	}
	want := renderQuantities(t, quantities)
	x := expose(quantities)
	for range 2 { // the writer is used again
		var out bytes.Buffer
		if err := x.sendZipped(&out); err != nil {
			t.Fatal(err)
		}
		if out.Len() >= len(want) {
			t.Errorf("%d bytes compressed, %d plain", out.Len(), len(want))
		}
		z, err := gzip.NewReader(&out)
		if err != nil {
			t.Fatal(err)
		}
		got, err := io.ReadAll(z)
		if err != nil {
			t.Fatal(err)
		}
		if string(got) != want {
			t.Error("the compressed page differs from the plain one")
		}
	}
}

// brokenPipe fails from its second write on.
type brokenPipe struct{ writes int }

var errBroken = errors.New("broken pipe")

func (b *brokenPipe) Write(p []byte) (int, error) {
	if b.writes++; b.writes > 1 {
		return 0, errBroken
	}
	return len(p), nil
}

func TestPageStopsAtABrokenConnection(t *testing.T) {
	x := expose([]published{quantityWith("q", "mm", "")})
	var out brokenPipe
	if err := x.send(&out); !errors.Is(err, errBroken) {
		t.Errorf("error is %v, want %v", err, errBroken)
	}
	if out.writes != 2 {
		t.Errorf("%d writes, want 2: one that worked and the one that failed", out.writes)
	}
}

func TestGzipIsNegotiated(t *testing.T) {
	for _, tt := range []struct {
		name    string
		headers []string
		want    bool
		source  string
	}{
		{"none", nil, false, "RFC 9110, 12.5.3: without the field any coding, identity is safe"},
		{"gzip", []string{"gzip"}, true, "RFC 9110, 12.5.3"},
		{"second", []string{"zstd, gzip;q=0.5"}, true, "RFC 9110, 12.5.3"},
		{"second field", []string{"zstd", "GZIP"}, true, "RFC 9110, 8.4.1: codings are case-insensitive"},
		{"refused", []string{"gzip;q=0"}, false, "RFC 9110, 12.4.2: weight 0 is not acceptable"},
		{"refused with decimals", []string{"gzip; q=0.000"}, false, "RFC 9110, 12.4.2"},
		{"least weight", []string{"gzip; q=0.001"}, true, "RFC 9110, 12.4.2"},
		{"identity", []string{"identity"}, false, "RFC 9110, 12.5.3"},
		{"another", []string{"x-gzip-not"}, false, "whole names count"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if got := acceptsGzip(tt.headers); got != tt.want {
				t.Errorf("Accept-Encoding %q: %t, want %t (%s)", tt.headers, got, tt.want, tt.source)
			}
		})
	}
}
