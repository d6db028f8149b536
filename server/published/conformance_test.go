package published_test

import (
	"strconv"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// conformanceCase is a belief made of a prior and a few readings, and what is
// published of it. Numbers are recomputed by mpmath with 40 digits to the 12
// printed here; wants of 0 are not looked at.
type conformanceCase struct {
	name        string
	declaration string
	values      []float64
	want        struct{ mean, deviation, below, above, conformance, predictive float64 }
	threshold   float64
	underThat   float64 // probability of lying below threshold
	verdict     leadlinev1.Belief_Verdict
	source      string
}

type figures = struct{ mean, deviation, below, above, conformance, predictive float64 }

// around returns n readings of the given mean, d above and below in turn.
func around(n int, mean, d float64) []float64 {
	var all []float64
	for i := range n {
		all = append(all, mean+d*float64(1-2*(i%2)))
	}
	return all
}

func conformanceCases() []conformanceCase {
	cases := []conformanceCase{
		{
			name: "zener-as-prior", declaration: `{"unit":"V","prior":{"mean":-5.47,"standard_deviation":0.05},"tolerance":{"upper":-5.40}}`,
			want:    figures{mean: -5.47, deviation: 0.05, above: 0.0807566592338, conformance: 0.919243340766},
			verdict: leadlinev1.Belief_INCONCLUSIVE,
			source:  "JCGM 106:2012, 7.3 example 1 (prints 0.92)",
		},
		{
			name: "zener-as-reading", declaration: `{"unit":"V","repeatability":{"standard_deviation":0.05},"tolerance":{"upper":-5.40}}`,
			values:  []float64{-5.47},
			want:    figures{mean: -5.47, deviation: 0.05, above: 0.0807566592338, conformance: 0.919243340766},
			verdict: leadlinev1.Belief_INCONCLUSIVE,
			source:  "JCGM 106:2012, 7.3 example 1, from the one reading instead",
		},
		{
			name:        "oil-as-prior",
			declaration: `{"unit":"mm²/s","prior":{"mean":13.6,"standard_deviation":1.8},"tolerance":{"lower":12.5,"upper":16.3}}`,
			want:        figures{mean: 13.6, deviation: 1.8, below: 0.270563012236, above: 0.0668072012689, conformance: 0.662629786495},
			verdict:     leadlinev1.Belief_INCONCLUSIVE,
			source:      "JCGM 106:2012, 7.4 example (prints 0.66)",
		},
		{
			name:        "oil-as-reading",
			declaration: `{"unit":"mm²/s","repeatability":{"standard_deviation":1.8},"tolerance":{"lower":12.5,"upper":16.3}}`,
			values:      []float64{13.6},
			want:        figures{mean: 13.6, deviation: 1.8, below: 0.270563012236, above: 0.0668072012689, conformance: 0.662629786495},
			verdict:     leadlinev1.Belief_INCONCLUSIVE,
			source:      "JCGM 106:2012, 7.4 example, from the one reading instead",
		},
		{
			name: "resistor-process",
			declaration: `{"unit":"Ohm","prior":{"mean":1500,"standard_deviation":0.12},"repeatability":{"standard_deviation":0.04},
				"tolerance":{"lower":1499.8,"upper":1500.2}}`,
			want:    figures{mean: 1500, deviation: 0.12, conformance: 0.904419295454, predictive: 0.126491106407},
			verdict: leadlinev1.Belief_INCONCLUSIVE,
			source:  "JCGM 106:2012, 9.5.3.2 and (A.15) (prints 0.90)",
		},
		{
			name: "resistor-at-acceptance-limit",
			declaration: `{"unit":"Ohm","prior":{"mean":1500,"standard_deviation":0.12},"repeatability":{"standard_deviation":0.04},
				"tolerance":{"lower":1499.8,"upper":1500.2}}`,
			values:  []float64{1500.18},
			want:    figures{mean: 1500.162, deviation: 0.037947331922, conformance: 0.841680350402},
			verdict: leadlinev1.Belief_INCONCLUSIVE,
			source:  "JCGM 106:2012, (A.13) and (A.14), numbers of 9.5.3.2",
		},
		{
			name:        "common-practice",
			declaration: `{"unit":"","prior":{"mean":100,"standard_deviation":1},"repeatability":{"standard_deviation":1},"tolerance":{"lower":100}}`,
			values:      []float64{101, 100.5, 101.5},
			want:        figures{mean: 100.75, deviation: 0.5, below: 0.0668072012689, conformance: 0.933192798731},
			threshold:   100, underThat: 0.0668072012689,
			verdict: leadlinev1.Belief_INCONCLUSIVE,
			source:  "common practice, no source: four equal weights, then Phi(-1.5)",
		},
		{
			name: "physicist-a-1", declaration: `{"unit":"","prior":{"mean":900,"standard_deviation":20},"repeatability":{"standard_deviation":40}}`,
			values: []float64{850},
			want:   figures{mean: 890, deviation: 17.88854382},
			source: "Box and Tiao (1973), 1.2.3, from memory (print 890 and 17.9)",
		},
		{
			name: "physicist-b-1", declaration: `{"unit":"","prior":{"mean":800,"standard_deviation":80},"repeatability":{"standard_deviation":40}}`,
			values: []float64{850},
			want:   figures{mean: 840, deviation: 35.77708764},
			source: "Box and Tiao (1973), 1.2.3, from memory (print 840 and 35.78)",
		},
		{
			name: "physicist-a-100", declaration: `{"unit":"","prior":{"mean":900,"standard_deviation":20},"repeatability":{"standard_deviation":40}}`,
			values: around(100, 870, 40),
			want:   figures{mean: 871.153846154, deviation: 3.92232270276},
			source: "Box and Tiao (1973), 1.2.3, from memory (print 871.2 and 3.9)",
		},
		{
			name: "physicist-b-100", declaration: `{"unit":"","prior":{"mean":800,"standard_deviation":80},"repeatability":{"standard_deviation":40}}`,
			values: around(100, 870, 40),
			want:   figures{mean: 869.825436409, deviation: 3.99500935551},
			source: "Box and Tiao (1973), 1.2.3, from memory (print 869.8 and 3.995)",
		},
	}
	return append(cases, tableOne()...)
}

// tableOne is JCGM 106:2012, table 1: the conformance probability at z = (T - y)/u
// from a single limit, for an upper limit and, mirrored, for a lower one.
func tableOne() []conformanceCase {
	var cases []conformanceCase
	for _, row := range []struct{ p, z float64 }{
		{0.80, 0.841621233573}, {0.90, 1.28155156554}, {0.95, 1.64485362695}, {0.99, 2.32634787404}, {0.999, 3.09023230617},
	} {
		verdict := leadlinev1.Belief_INCONCLUSIVE
		if row.p > 0.95 {
			verdict = leadlinev1.Belief_CONFORMS
		}
		for _, limit := range []string{`"upper":` + number(row.z), `"lower":` + number(-row.z)} {
			c := conformanceCase{
				name:        "table-1/" + strconv.Itoa(len(cases)),
				declaration: `{"unit":"","repeatability":{"standard_deviation":1},"tolerance":{` + limit + `}}`,
				values:      []float64{0},
				want:        figures{deviation: 1, conformance: row.p},
				verdict:     verdict,
				source:      "JCGM 106:2012, table 1",
			}
			if row.p == 0.95 { // 12 digits of z leave open on which side of the rule it is
				c.verdict = leadlinev1.Belief_UNSPECIFIED
			}
			cases = append(cases, c)
		}
	}
	return cases
}

func TestPublishedConformance(t *testing.T) {
	s := start(t)
	for _, tt := range conformanceCases() {
		t.Run(tt.name, func(t *testing.T) {
			s.declare(tt.name, tt.declaration)
			s.postAll(readingsOf(tt.name, tt.values))
			b := s.belief(tt.name, time.Time{})
			for _, f := range []struct {
				what                 string
				got, want, tolerance float64
			}{
				{"mean", b.GetMean(), tt.want.mean, 1e-11},
				{"standard deviation", b.GetStandardDeviation(), tt.want.deviation, 1e-11},
				{"breach below", b.GetBreach().GetBelow(), tt.want.below, 1e-11},
				{"breach above", b.GetBreach().GetAbove(), tt.want.above, 1e-11},
				// 1 - 0.999 has lost three of the 12 digits.
				{"breach either", b.GetBreach().GetEither(), 1 - tt.want.conformance, 1e-8},
				{"conformance probability", b.GetConformanceProbability(), tt.want.conformance, 1e-11},
				{"predictive standard deviation", b.GetPredictive().GetStandardDeviation(), tt.want.predictive, 1e-11},
			} {
				if f.want == 0 || f.want == 1 {
					continue
				}
				wantNear(t, f.what+" ("+tt.source+")", f.got, f.want, f.tolerance)
			}
			if tt.underThat != 0 {
				asked := new(leadlinev1.Belief)
				s.call("GET", quantityPath(tt.name)+"/belief?threshold="+number(tt.threshold), "").into(asked)
				wantNear(t, "probability below the threshold", asked.GetThreshold().GetProbabilityBelow(), tt.underThat, 1e-11)
				wantPrinted(t, "probability below the threshold", asked.GetThreshold().GetProbabilityBelow(), "0.0668")
			}
			if tt.verdict != leadlinev1.Belief_UNSPECIFIED && b.GetVerdict() != tt.verdict {
				t.Errorf("verdict %v, want %v (%s)", b.GetVerdict(), tt.verdict, tt.source)
			}
		})
	}
}
