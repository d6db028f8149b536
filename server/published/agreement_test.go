package published_test

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// page is the Prometheus page: numbers by name and labels, as written.
type page map[string]string

func (s *service) scrape() page {
	s.t.Helper()
	p := page{}
	for line := range strings.Lines(s.call("GET", "/metrics", "").ok().body) {
		line = strings.TrimSuffix(line, "\n")
		if line == "" || line[0] == '#' {
			continue
		}
		i := strings.LastIndexByte(line, ' ')
		if i < 0 {
			s.t.Fatalf("line %q has no number", line)
		}
		if _, twice := p[line[:i]]; twice {
			s.t.Errorf("series %s is there twice", line[:i])
		}
		p[line[:i]] = line[i+1:]
	}
	return p
}

func (p page) number(t testing.TB, series string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(p[series], 64)
	if err != nil {
		t.Fatalf("series %s is %q", series, p[series])
	}
	return x
}

// instant is the one at which the page was evaluated, whole milliseconds.
func (p page) instant(t testing.TB) time.Time {
	t.Helper()
	ms := p.number(t, "leadline_evaluation_timestamp_seconds") * 1000
	return time.UnixMilli(int64(math.Round(ms))).UTC()
}

// of counts the series of a quantity.
func (p page) of(id string) int {
	n := 0
	for series := range p {
		if strings.Contains(series, `quantity="`+id+`"`) {
			n++
		}
	}
	return n
}

// series lists what the page has to say of a belief: exactly what exists.
func series(b *leadlinev1.Belief) map[string]float64 {
	id := `{quantity="` + b.GetQuantity() + `"`
	labels := id + `,unit="` + b.GetUnit() + `"`
	want := map[string]float64{"leadline_quantity_readings_total" + id + "}": float64(b.GetReadingCount())}
	if b.Mean != nil {
		want["leadline_posterior_mean"+labels+"}"] = b.GetMean()
	}
	if b.StandardDeviation != nil {
		want["leadline_posterior_standard_deviation"+labels+"}"] = b.GetStandardDeviation()
	}
	if b.Interval != nil {
		want["leadline_posterior_interval_lower"+labels+`,coverage_probability="0.95"}`] = b.GetInterval().GetLower()
		want["leadline_posterior_interval_upper"+labels+`,coverage_probability="0.95"}`] = b.GetInterval().GetUpper()
	}
	if b.Breach != nil {
		for side, p := range map[string]float64{"below": b.Breach.GetBelow(), "above": b.Breach.GetAbove(), "either": b.Breach.GetEither()} {
			want["leadline_breach_probability"+id+`,side="`+side+`"}`] = p
		}
	}
	if b.Verdict != nil {
		for _, v := range []leadlinev1.Belief_Verdict{leadlinev1.Belief_CONFORMS, leadlinev1.Belief_BREACHES, leadlinev1.Belief_INCONCLUSIVE} {
			x := 0.0
			if v == b.GetVerdict() {
				x = 1
			}
			want["leadline_verdict"+id+`,verdict="`+v.String()+`"}`] = x
		}
	}
	if b.LastReadingTime != nil {
		want["leadline_last_reading_timestamp_seconds"+id+"}"] = seconds(b.GetLastReadingTime().AsTime())
	}
	checkSeries(want, id, b.GetModelCheck())
	return want
}

// checkSeries adds what the page has to say of a belief's model check; id is the beginning of
// the labels.
func checkSeries(want map[string]float64, id string, c *leadlinev1.ModelCheck) {
	want["leadline_model_check"+id+`,result="`+c.GetResult().String()+`"}`] = 1
	want["leadline_steps_total"+id+"}"] = float64(c.GetStepCount())
	want["leadline_outlying_readings_total"+id+"}"] = float64(c.GetOutlyingCount())
	if c.Coverage_50 != nil {
		want["leadline_predictive_coverage"+id+`,coverage_probability="0.5"}`] = c.GetCoverage_50()
	}
	if c.Coverage_95 != nil {
		want["leadline_predictive_coverage"+id+`,coverage_probability="0.95"}`] = c.GetCoverage_95()
	}
	if c.MeanSquaredNormalScore != nil {
		want["leadline_normal_score_mean_square"+id+"}"] = c.GetMeanSquaredNormalScore()
	}
}

// seconds is the double next to a time's exact seconds since 1970.
func seconds(t time.Time) float64 {
	x, err := strconv.ParseFloat(fmt.Sprintf("%d.%09d", t.Unix(), t.Nanosecond()), 64)
	if err != nil {
		panic(err) // a number of digits is no error
	}
	return x
}

// agreementQuantities have every form of belief, and every way of lacking one.
var agreementQuantities = []struct {
	id, declaration string
	values          []float64
	constantSeries  int // of the declaration: its info and its limits
}{
	{"pump-3/gap", gapDeclaration, []float64{0.81, 0.84, 0.79}, 3},
	{"store-1/air", `{"unit":"°C","repeatability":{"learned":{}},"tolerance":{"upper":-18}}`, []float64{-20.1, -19.7, -20.4, -18.9}, 2},
	{"store-2/air", `{"unit":"°C","repeatability":{"learned":{}},"tolerance":{"lower":-24,"upper":-18}}`, []float64{-20.1, -19.7}, 3},
	{"store-3/air", `{"unit":"°C","repeatability":{"learned":{}},"tolerance":{"upper":-18}}`, []float64{-20}, 2},
	{"dosing:residual", `{"unit":"mg/L","prior":{"mean":0.8,"standard_deviation":0.02},"repeatability":{"learned":{"guess":0.02,"worth":4}},
		"tolerance":{"upper":0.9}}`, []float64{0.95, 1.00, 0.93}, 2},
	{"winch.wall", `{"unit":"mm","prior":{"low":7.5,"high":8.5,"probability":0.9}}`, nil, 1},
	{"winch.rope", `{"unit":"mm","repeatability":{"standard_deviation":0.1}}`, nil, 1},
	{"brine/flow", `{"unit":"L/s","repeatability":{"standard_deviation":0.5},"dynamics":{"random_walk":{"standard_deviation":1,"per":"60s"}},
		"tolerance":{"lower":10}}`, []float64{12.5, 11.8, 11.1, 10.7}, 2},
}

const gapDeclaration = `{"unit":"mm","description":"coupling gap, brine pump 3",
 "prior":{"mean":0.80,"standard_deviation":0.05},"repeatability":{"standard_deviation":0.02},
 "dynamics":{"random_walk":{"standard_deviation":0.01,"per":"86400s"}},
 "tolerance":{"lower":0.70,"upper":0.90}}`

func startAgreement(t *testing.T) *service {
	s := start(t)
	for _, q := range agreementQuantities {
		s.declare(q.id, q.declaration)
		for i, v := range q.values {
			s.postAll([]posted{{Quantity: q.id, Value: v, ID: fmt.Sprint("r", i)}})
			s.clock.Advance(17*time.Minute + 123456789*time.Nanosecond)
		}
	}
	return s
}

// The page, HTTP and gRPC give the same bits for the same instant, and say what
// reproduces them: instant, revision, ledger position.
func TestPageAndBothProtocolsAgree(t *testing.T) {
	s := startAgreement(t)
	for _, step := range []struct {
		name   string
		change func()
	}{
		{"after a pause", func() {}},
		{"within the millisecond of a reading", func() { // which the cut instant leaves out
			s.postAll([]posted{{Quantity: "brine/flow", Value: 10.2}, {Quantity: "store-1/air", Value: -18.2}})
		}},
		{"much later", func() { s.clock.Advance(400 * time.Hour) }},
		{"after a redeclaration", func() {
			s.declare("brine/flow", strings.Replace(agreementQuantities[7].declaration, `"standard_deviation":1`, `"standard_deviation":2`, 1))
		}},
	} {
		step.change()
		p := s.scrape()
		at := p.instant(t)
		if age := s.clock.Now().Sub(at); age < 0 || age >= time.Millisecond {
			t.Errorf("%s: evaluated at %v, %v before the scrape", step.name, at, age)
		}
		for _, q := range agreementQuantities {
			b := s.belief(q.id, at)
			want := series(b)
			for name, x := range want {
				if got, ok := p[name]; !ok || math.Float64bits(p.number(t, name)) != math.Float64bits(x) {
					t.Errorf("%s: page has %s %s, belief says %v", step.name, name, got, x)
				}
			}
			if got := p.of(q.id); got != len(want)+q.constantSeries || got > 21 {
				t.Errorf("%s: page has %d series of %s, belief and declaration make %d", step.name, got, q.id, len(want)+q.constantSeries)
			}
			s.checkNamed(b, p)
		}
	}
}

// checkNamed checks what a belief says of how it can be reproduced.
func (s *service) checkNamed(b *leadlinev1.Belief, p page) {
	s.t.Helper()
	quantity := new(leadlinev1.Quantity)
	s.call("GET", quantityPath(b.GetQuantity()), "").into(quantity)
	if b.GetRevision() != quantity.GetRevision() || b.GetRevision() == 0 {
		s.t.Errorf("%s: belief of revision %d, declared in revision %d", b.GetQuantity(), b.GetRevision(), quantity.GetRevision())
	}
	if newest := p.number(s.t, "leadline_ledger_position"); b.GetLedgerPosition() == 0 || float64(b.GetLedgerPosition()) > newest {
		s.t.Errorf("%s: belief of ledger position %d, the newest is %v", b.GetQuantity(), b.GetLedgerPosition(), newest)
	}
}

// snapshot is every belief at an instant, as text, by quantity.
func (s *service) snapshot(at time.Time) map[string]string {
	s.t.Helper()
	all := map[string]string{}
	for _, q := range agreementQuantities {
		all[q.id] = s.beliefText(q.id, at, "threshold", "0.8", "coverage_probability", "0.9")
	}
	return all
}

func wantSameSnapshot(t testing.TB, what string, got, want map[string]string) {
	t.Helper()
	if len(got) != len(want) {
		t.Errorf("%s: %d quantities, want %d", what, len(got), len(want))
	}
	for id, text := range want {
		if got[id] != text {
			t.Errorf("%s: belief of %s\n%s\nwant\n%s", what, id, got[id], text)
		}
	}
}

// The same file gives the same bits after a restart, be it orderly or not, and
// after several.
func TestSameFileGivesSameBits(t *testing.T) {
	s := startAgreement(t)
	moments := []time.Time{s.clock.Now(), noon.Add(20 * time.Minute), noon.Add(-time.Hour)}
	var before []map[string]string
	for _, at := range moments {
		before = append(before, s.snapshot(at))
	}
	for _, again := range []struct {
		name string
		next func(*service) *service
	}{
		{"after a crash", (*service).abandon},
		{"after a restart", (*service).restart},
		{"after a second restart", (*service).restart},
		{"after a crash behind a checkpoint", (*service).abandon},
	} {
		s = again.next(s)
		for i, at := range moments {
			wantSameSnapshot(t, again.name, s.snapshot(at), before[i])
		}
	}
}
