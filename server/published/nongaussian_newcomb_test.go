package published_test

import (
	"encoding/json"
	"fmt"
	"math"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

const (
	strays    = 0.05 // the probability that a reading of Newcomb's is an outlier
	straysFar = 5.0  // and its inflation
)

// stray returns ln of the density of a reading and the probability that it is an outlier, both given level and r.
func stray(y, mu, r float64) (log, probability float64) {
	usual, out := math.Log(1-strays)+logNormal(y, mu, r), math.Log(strays)+logNormal(y, mu, straysFar*r)
	log = max(usual, out) + math.Log1p(math.Exp(-math.Abs(usual-out)))
	return log, math.Exp(out - log)
}

// Newcomb's 66 passage times hold two, -44 and -2, that Stigler (1977, Annals of Statistics 5) and all since
// set aside. Declared as possible outliers they count for next to nothing, and the belief is where
// the median is, 27, and the mean without the two, 27.75; not declared they move the mean by 1.5
// and double the uncertainty. All is held against integration over level and repeatability.
func TestNewcombsOutliers(t *testing.T) {
	s := start(t)
	passage, times := dataset(t, "newcomb")
	s.declare("newcomb", `{"unit":"ns","repeatability":{"learned":{}},"outliers":{"probability":0.05,"inflation":5}}`)
	s.postAll(timedReadings("newcomb", passage, times))
	b := s.belief("newcomb", time.Time{})
	assessed := s.assess("newcomb", "page_size=100")

	p := newPlane(27, 5, 8, 701, 0.5, 500)
	for i, y := range passage {
		if i >= 10 && i%5 == 4 { // from here on next to nothing lies beyond the plane
			wantForetold(t, p, y, assessed[i])
		}
		p.take(func(mu, r float64) float64 { log, _ := stray(y, mu, r); return log })
	}
	wantBelief(t, b, p)
	without := 0.0
	for _, y := range passage {
		if y >= 0 {
			without += y / float64(len(passage)-2)
		}
	}
	wantPrinted(t, "mean without the two", without, "27.75")
	if math.Abs(b.GetMean()-without) > 0.2*b.GetStandardDeviation() {
		t.Errorf("mean %v +- %v, want about %v", b.GetMean(), b.GetStandardDeviation(), without)
	}
	if got := s.modelCheck("newcomb").GetResult(); got != leadlinev1.ModelCheck_NO_OBJECTION {
		t.Errorf("model check %v, want none: without the two the readings are normal", got)
	}
	for _, i := range []int{1, 53} {
		s.wantHindsight(p, passage[i], times[i])
	}
}

// wantHindsight compares the probability that the reading of a time is an outlier with its mean over the posterior.
func (s *service) wantHindsight(p *plane, y float64, at time.Time) {
	s.t.Helper()
	want := p.average(func(n int) float64 { _, out := stray(y, p.mu[n], p.r[n]); return out })
	a := s.assess("newcomb", "hindsight=true&page_size=1&start="+rfc3339(at))[0]
	if a.GetReading().GetValue() != y {
		s.t.Fatalf("assessed %v, want %v", a.GetReading(), y)
	}
	wantProbability(s.t, fmt.Sprintf("in hindsight of %v", y), a.GetOutlierProbabilityInHindsight(), want)
	if certain := want > 0.999; certain != (y < 0) {
		s.t.Errorf("%v is an outlier with probability %v", y, want)
	}
	s.t.Logf("%v: an outlier with probability %.6f at its time, %.8f in hindsight, %.8f by integration",
		y, a.GetOutlierProbability(), a.GetOutlierProbabilityInHindsight(), want)
}

// With the repeatability of the other readings, 5, declared, each is judged by what those before it tell of the
// level, and in hindsight by all: the two are outliers beyond doubt, and no other is.
func TestNewcombsOutliersAtTheirTime(t *testing.T) {
	s := start(t)
	passage, times := dataset(t, "newcomb")
	s.declare("newcomb", `{"unit":"ns","repeatability":{"standard_deviation":5},"outliers":{"probability":0.05,"inflation":5}}`)
	s.postAll(timedReadings("newcomb", passage, times))
	assessed := s.assess("newcomb", "page_size=100")
	p := newPlane(27, 5, 7, 2001, 5)
	for i, y := range passage {
		if i > 0 {
			wantForetold(t, p, y, assessed[i])
			wantOutlier(t, p, y, assessed[i])
		}
		p.take(func(mu, r float64) float64 { log, _ := stray(y, mu, r); return log })
	}
	wantBelief(t, s.belief("newcomb", time.Time{}), p)
	for i, y := range passage {
		s.wantHindsight(p, y, times[i])
	}
}

// wantForetold compares tail and outlier probability with the integrals over what was known before.
func wantForetold(t *testing.T, p *plane, y float64, a *leadlinev1.Assessment) {
	t.Helper()
	above := p.average(func(i int) float64 {
		z := (y - p.mu[i]) / p.r[i]
		return (1-strays)*upper(z) + strays*upper(z/straysFar)
	})
	wantNear(t, fmt.Sprintf("tail probability of %v", y), a.GetTailProbability(), 2*min(above, 1-above), 0.03)
}

// wantOutlier compares the probability of an outlier at its time with Bayes' rule on both integrals.
func wantOutlier(t *testing.T, p *plane, y float64, a *leadlinev1.Assessment) {
	t.Helper()
	usual := p.average(func(i int) float64 { return math.Exp(logNormal(y, p.mu[i], p.r[i])) })
	out := p.average(func(i int) float64 { return math.Exp(logNormal(y, p.mu[i], straysFar*p.r[i])) })
	wantProbability(t, fmt.Sprintf("at the time of %v", y), a.GetOutlierProbability(), strays*out/(strays*out+(1-strays)*usual))
}

// wantProbability compares by the odds, to 3 %.
func wantProbability(t testing.TB, what string, got, want float64) {
	t.Helper()
	if math.Abs(math.Log(got)-math.Log(want)) > 0.03 || math.Abs(got-want) > 0.03*(1-want)+1e-12 {
		t.Errorf("probability of an outlier %s is %v, want %v", what, got, want)
	}
}

func (s *service) assess(id, query string) []*leadlinev1.Assessment {
	s.t.Helper()
	var page struct{ Assessments []json.RawMessage }
	m := new(leadlinev1.AssessReadingsResponse)
	a := s.call("GET", quantityPath(id)+"/assessments?"+query, "").ok()
	if err := json.Unmarshal([]byte(a.body), &page); err != nil {
		s.t.Fatal(err)
	}
	a.into(m)
	if len(page.Assessments) != len(m.GetAssessments()) || len(page.Assessments) == 0 {
		s.t.Fatalf("%d assessments", len(page.Assessments))
	}
	return m.GetAssessments()
}
