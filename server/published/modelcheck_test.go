package published_test

import (
	"fmt"
	"math"
	"slices"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// The service says of each set of data what was found apart from it: to rounding where the predictives
// are exact, to 2e-4 where they are of a bank.
func TestWhatTheCheckSaysOfKnownData(t *testing.T) {
	s, all := start(t), findings(t)
	for _, tt := range knownData {
		t.Run(tt.name, func(t *testing.T) {
			f := all[tt.name]
			if f == nil {
				t.Fatalf("knowndata.json has no %q", tt.name)
			}
			s := s.under(t)
			id := "known-" + slug(tt.name)
			s.declare(id, `{"unit":"",`+tt.declaration+`}`)
			values, times := dataset(t, tt.data)
			s.postToSteps(id, values, times, f.Steps)
			m := s.modelCheck(id)
			wantFinding(t, m, f, map[string]float64{"SUMS": 2e-6, "FILTER": 1e-9, "BANK": 2e-4}[tt.by])
			if got := s.belief(id, time.Time{}).GetMethod(); got != tt.by {
				t.Errorf("method %s, want %s", got, tt.by)
			}
			if f.Explanation != nil {
				wantExplanation(t, m.GetExplanation(), f.Explanation)
			}
			t.Logf("%s | %v | lag 1 %.2f | mean square %.2f | coverage %.2f, %.2f | steps %v | %s",
				tt.name, m.GetObjections(), m.GetLag_1(), m.GetMeanSquaredNormalScore(), m.GetCoverage_50(), m.GetCoverage_95(), f.Steps, tt.why)
		})
	}
}

// slug makes an ID of a name.
func slug(name string) string {
	return string(slices.DeleteFunc([]byte(name), func(c byte) bool { return c == ' ' || c == ',' || c == '+' }))
}

// postToSteps posts readings, and insists that each step is found at its reading, not
// before.
func (s *service) postToSteps(id string, values []float64, times []time.Time, steps []foundStep) {
	s.t.Helper()
	all, from := timedReadings(id, values, times), 0
	for i, step := range steps {
		s.postAll(all[from:step.At])
		if n := int(s.modelCheck(id).GetStepCount()); n != i {
			s.t.Errorf("%d steps before the reading of %v, want %d", n, times[step.At], i)
		}
		s.postAll(all[step.At : step.At+1])
		from = step.At + 1
		m := s.modelCheck(id)
		last := m.GetLastStep()
		right := last.GetTime().AsTime().Equal(times[step.At]) && last.GetSince().AsTime().Equal(times[step.Since]) && last.GetDirection().String() == step.Direction
		if int(m.GetStepCount()) != i+1 || !right {
			s.t.Errorf("%d steps, the last %v at the reading of %v; want one since %v, %s", m.GetStepCount(), last, times[step.At], times[step.Since], step.Direction)
		}
	}
	s.postAll(all[from:])
	if n := int(s.modelCheck(id).GetStepCount()); n != len(steps) {
		s.t.Errorf("%d steps, want %d", n, len(steps))
	}
}

func (s *service) modelCheck(id string) *leadlinev1.ModelCheck {
	s.t.Helper()
	m := new(leadlinev1.ModelCheck)
	s.call("GET", quantityPath(id)+"/model_check", "").into(m)
	return m
}

// wantFinding compares all that the check publishes. Probabilities of the tests have 1000 times the tolerance
// of the statistics, of which those of some 1e-30 have the hundredth power or so.
func wantFinding(t *testing.T, m *leadlinev1.ModelCheck, f *finding, tolerance float64) {
	t.Helper()
	if m.GetResult().String() != f.Result || !sameObjections(m.GetObjections(), f.Objections) {
		t.Errorf("%v, objections %v; want %v, %v", m.GetResult(), m.GetObjections(), f.Result, f.Objections)
	}
	if int(m.GetScoredCount()) != f.Scored {
		t.Errorf("%d scored, want %d", m.GetScoredCount(), f.Scored)
	}
	if math.Abs(m.GetMeanSquaredNormalScore()-f.MeanSquare) > tolerance*max(1, f.MeanSquare) {
		t.Errorf("mean square %v, want %v", m.GetMeanSquaredNormalScore(), f.MeanSquare)
	}
	wantNear(t, "coverage 50", m.GetCoverage_50(), f.Coverage50, 1e-12)
	wantNear(t, "coverage 95", m.GetCoverage_95(), f.Coverage95, 1e-12)
	wantNear(t, "CUSUM limit", m.GetCusum().GetLimit(), f.Threshold, 1e-7)
	if f.Level == 0 {
		if len(m.GetTests()) != 0 {
			t.Errorf("tests %v without a full window", m.GetTests())
		}
		return
	}
	if math.Abs(m.GetLag_1()-f.Lag) > tolerance {
		t.Errorf("lag 1 %v, want %v", m.GetLag_1(), f.Lag)
	}
	if len(m.GetTests()) != 3 {
		t.Fatalf("tests %v, want those of a window", m.GetTests())
	}
	wantNear(t, "sum of squares", m.GetTests()[0].GetStatistic(), f.Square, tolerance)
	for i, test := range m.GetTests() {
		wantNear(t, "level", test.GetLevel(), f.Level, 1e-9)
		wantNear(t, "probability of "+test.GetName(), test.GetProbability(), f.Probability[i], 1000*tolerance)
	}
}

func sameObjections(got []leadlinev1.ModelCheck_Result, want []string) bool {
	var words []string
	for _, o := range got {
		words = append(words, o.String())
	}
	return slices.Equal(slices.Sorted(slices.Values(words)), slices.Sorted(slices.Values(want)))
}

// wantExplanation holds the greatest log-likelihoods and what was fitted against those of the
// dense covariance. Fits are to 1e-4 of a logarithm, which about the greatest likelihood is 1e-6 of it.
func wantExplanation(t *testing.T, got *leadlinev1.ModelCheck_Explanation, want *explained) {
	t.Helper()
	for _, l := range []struct {
		name      string
		got, want float64
	}{
		{"as declared", got.GetAsDeclared().GetLogLikelihood(), want.AsDeclared},
		{"moving", got.GetMoving().GetLogLikelihood(), want.Moving},
		{"correlated", got.GetCorrelatedNoise().GetLogLikelihood(), want.Correlated},
	} {
		if math.Abs(l.got-l.want) > 1e-5 {
			t.Errorf("log-likelihood %s %v, want %v", l.name, l.got, l.want)
		}
	}
	wantNear(t, "movement per day", got.GetMoving().GetStandardDeviation(), want.PerDay, 1e-3)
	wantNear(t, "correlated noise", got.GetCorrelatedNoise().GetStandardDeviation(), want.SD, 3e-3)
	wantNear(t, "correlation time", got.GetCorrelatedNoise().GetCorrelationTime().AsDuration().Seconds(), want.CorrelationTime, 1e-2)
	t.Logf("log-likelihoods: as declared %.2f, moving %.2f with %.3g a day, correlated %.2f with %.3g over %v",
		want.AsDeclared, want.Moving, want.PerDay, want.Correlated, want.SD, time.Duration(want.CorrelationTime*1e9).Round(time.Minute))
}

// After the drop of 1898 the flow has another mean, 850 instead of 1098 (Cobb 1978). A belief that a
// step widens comes to the mean of what was read since the step was found; one that isn't stays
// at that of all years.
func TestWideningFollowsTheNile(t *testing.T) {
	s := start(t)
	flow, times := dataset(t, "nile")
	const found = 30 // 1901, the reading at which the interval 100 finds it
	since, after := 0.0, 0.0
	for i, y := range flow {
		if i > found {
			since += y / float64(len(flow)-found-1)
		}
		if i > 27 {
			after += y / float64(len(flow)-28)
		}
	}
	s.declare("kept", `{"unit":"",`+unknown+","+often+`}`)
	s.declare("widened", `{"unit":"",`+unknown+`,"step_detection":{"false_alarm_interval":100,`+widen+`}}`)
	for _, id := range []string{"kept", "widened"} {
		s.postAll(timedReadings(id, flow, times))
	}
	kept, widened := s.belief("kept", times[99]), s.belief("widened", times[99])
	if off := (widened.GetMean() - after) / widened.GetStandardDeviation(); math.Abs(off) > 1 {
		t.Errorf("widened: %v +- %v, %.1f standard deviations from %v", widened.GetMean(), widened.GetStandardDeviation(), off, after)
	}
	if off := (kept.GetMean() - after) / kept.GetStandardDeviation(); off < 4 {
		t.Errorf("kept: %v +- %v, only %.1f standard deviations from %v", kept.GetMean(), kept.GetStandardDeviation(), off, after)
	}
	t.Logf("after 1898 the mean is %.1f, since 1901 %.1f; kept %.1f +- %.1f, widened %.1f +- %.1f", after, since,
		kept.GetMean(), kept.GetStandardDeviation(), widened.GetMean(), widened.GetStandardDeviation())
}

// Steps of readings that come all at once are each an event, those before 1970 too. The service records them
// after it has answered, so the list is asked for until it is full; how long that takes is not tested.
func TestStepsOfTheNileAreEvents(t *testing.T) {
	s, f := start(t), findings(t)["nile, constant, 100"]
	flow, times := dataset(t, "nile")
	s.declare("nile", `{"unit":"",`+unknown+","+often+`}`)
	s.postAll(timedReadings("nile", flow, times))
	m := new(leadlinev1.ListStepsResponse)
	for tries := 0; len(m.GetSteps()) < len(f.Steps) && tries < 10_000; tries++ {
		s.call("GET", quantityPath("nile")+"/steps", "").into(m)
	}
	if len(m.GetSteps()) != len(f.Steps) {
		t.Fatalf("events %v, want %d", m.GetSteps(), len(f.Steps))
	}
	for i, want := range f.Steps {
		got := m.GetSteps()[i]
		if !got.GetTime().AsTime().Equal(times[want.At]) || !got.GetSince().AsTime().Equal(times[want.Since]) || got.GetDirection().String() != want.Direction {
			t.Errorf("event %d is %v; want one at %v since %v", i+1, got, times[want.At], times[want.Since])
		}
	}
}

// The worked example of a CUSUM in the NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.3 (from memory):
// target 325, standard deviation 0.635, k = 0.3175 and h = 4.1959, which is 6.6077 standard deviations. A level known to be
// 325 predicts each group so. The upper sum is 3.0075 at group 13, and 4.94 at group 14 is a step.
func TestStepInTheHandbooksExample(t *testing.T) {
	groups := []float64{
		324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600,
		324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350,
	}
	const sd = 0.635
	s := start(t)
	// The mean run length that belongs to 6.6077: Page's integral equation at 120 nodes, by NumPy as in knowndata.py.
	s.declare("groups", `{"unit":"","prior":{"mean":325,"standard_deviation":1e-6},"repeatability":{"standard_deviation":0.635},
		"step_detection":{"false_alarm_interval":2350.2973191301}}`)
	all := timedReadings("groups", groups[:14], daily(14))
	s.postAll(all[:13])
	m := s.modelCheck("groups")
	wantNear(t, "limit", m.GetCusum().GetLimit()*sd, 4.1959, 1e-6)
	wantNear(t, "sum at group 13", m.GetCusum().GetUp()*sd, 3.0075, 1e-6)
	if m.GetStepCount() != 0 {
		t.Errorf("%d steps up to group 13", m.GetStepCount())
	}
	s.postAll(all[13:])
	m = s.modelCheck("groups")
	if last := m.GetLastStep(); m.GetStepCount() != 1 || last.GetDirection() != leadlinev1.StepEvent_UP || !last.GetSince().AsTime().Equal(daily(14)[11]) {
		t.Errorf("%d steps at group 14, the last %v; want one up since group 12", m.GetStepCount(), last)
	}
}

// Mean run lengths of the two-sided CUSUM with k = 1/2 are in many tables 168 at h = 4 and 465 at h = 5 (Montgomery,
// Introduction to Statistical Quality Control, 9.1.3, from memory).
// A false step in a million readings takes h = 12.7.
func TestLimitsHaveTheirPublishedRunLengths(t *testing.T) {
	s := start(t)
	for interval, printed := range map[int]string{168: "4.00", 465: "5.00", 1000000: "12.7"} {
		id := fmt.Sprint("interval-", interval)
		s.declare(id, fmt.Sprintf(`{"unit":"",%s,"step_detection":{"false_alarm_interval":%d}}`, unknown, interval))
		wantPrinted(t, id, s.modelCheck(id).GetCusum().GetLimit(), printed)
	}
}
