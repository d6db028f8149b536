package published_test

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/durationpb"
	"google.golang.org/protobuf/types/known/timestamppb"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// movingQuantities have every dynamics; all are read by the thermometers.
var movingQuantities = []struct{ id, declaration string }{
	{"ice-water/bath", `{"unit":"Cel","prior":{"mean":0,"standard_deviation":1},"repeatability":{"standard_deviation":0.3},
		"tolerance":{"lower":-0.5,"upper":0.5},"breach_horizon":"3600s"}`},
	{"store-1/air", `{"unit":"Cel","repeatability":{"standard_deviation":0.3},"tolerance":{"upper":1.5},"breach_horizon":"7200s",
		"dynamics":{"random_walk":{"standard_deviation":0.5,"per":"3600s"}}}`},
	{"compressor-2/bearing", `{"unit":"Cel","prior":{"mean":0,"standard_deviation":2,"time":"2026-03-01T08:00:00Z"},"tolerance":{"upper":2},"breach_horizon":"14400s",
		"dynamics":{"linear_trend":{"standard_deviation":0.1,"per":"3600s","slope":{"mean":0.1,"standard_deviation":0.2,"per":"3600s"},
		"slope_wander":{"standard_deviation":0.05,"per":"3600s"}}}}`},
	{"brine/return", `{"unit":"Cel","repeatability":{"standard_deviation":0.3},"tolerance":{"lower":-2,"upper":2},"breach_horizon":"7200s",
		"dynamics":{"mean_reverting":{"mean":0,"standard_deviation":1,"half_life":"1800s"}}}`},
}

// thermometers share a standard; the first settles slowly and was calibrated anew at
// ten, the second is mounted for each round, drifts and is overdue, the third reads in proportion.
var thermometers = []struct{ id, declaration string }{
	{"probe-1", `{"unit":"Cel","repeatability":{"standard_deviation":0.1,"correlated":{"standard_deviation":0.2,"correlation_time":"600s"}},"calibrations":[
		{"valid_from":"2026-01-01T00:00:00Z","bias":0.1,"bias_standard_uncertainty":0.2,"reference":"ice point","common_standard_uncertainty":0.05},
		{"valid_from":"2026-03-01T10:00:00Z","bias":-0.1,"expanded_uncertainty":0.3,"coverage_factor":2,"reference":"ice point","common_standard_uncertainty":0.1}]}`},
	{"probe-2", `{"unit":"Cel","repeatability":{"standard_deviation":0.15,"between_occasions":0.2},"resolution":0.1,"calibrations":[
		{"valid_from":"2026-02-01T00:00:00Z","bias_standard_uncertainty":0.1,"reference":"ice point","common_standard_uncertainty":0.05,
		 "drift_standard_deviation":0.1,"drift_per":"86400s","due":"2026-03-01T11:00:00Z"}]}`},
	{"probe-3", `{"unit":"Cel","repeatability":{"standard_deviation":0.1,"relative":0.02},"calibrations":[
		{"valid_from":"2026-03-01T09:00:00Z","bias_standard_uncertainty":0.1,"relative_bias_standard_uncertainty":0.05}]}`},
}

// movingReadings are 40 a quantity over three hours, the thermometers in turn, six to
// an occasion, some without one and some by hand with an uncertainty of their own.
func movingReadings(seed uint64) []posted {
	random := newRand(seed)
	var all []posted
	for _, q := range movingQuantities {
		for i := range 40 {
			p := posted{
				Quantity: q.id, Value: math.Round(1000*random.NormFloat64()) / 1000, ID: "r" + strconv.Itoa(i),
				Time: rfc3339(noon.Add(-3*time.Hour + time.Duration(i)*269*time.Second)),
			}
			switch n := random.IntN(7); {
			case n < 6:
				p.Instrument = thermometers[n/2].id
				if i%5 > 0 {
					p.Occasion = "round " + strconv.Itoa(i/6)
				}
			default:
				u := 0.25
				p.Uncertainty = &u
			}
			all = append(all, p)
		}
	}
	return all
}

func startMoving(t *testing.T) *service {
	s := start(t)
	for _, i := range thermometers {
		s.declareInstrument(i.id, i.declaration)
	}
	for _, q := range movingQuantities {
		s.declare(q.id, q.declaration)
	}
	return s
}

func (s *service) declareInstrument(id, declaration string) {
	s.t.Helper()
	s.call("PUT", "/v1/instruments/"+id, declaration).ok()
}

// Instruments, every dynamics, late and shuffled traffic with retries, crashes, a
// renewal kept and one withdrawn, a corrected and a retired instrument: at every
// stage all ways to ask agree, and the end is that of the same readings in order.
func TestInstrumentsAndMovingQuantitiesEndToEnd(t *testing.T) {
	for _, seed := range seeds(2) {
		s := startMoving(t)
		all := movingReadings(seed)
		shuffled := slices.Clone(all)
		newRand(seed+100).Shuffle(len(shuffled), func(i, k int) { shuffled[i], shuffled[k] = shuffled[k], shuffled[i] })
		s.postPieces(shuffled[:90], 0)
		s.checkEverything("half way")
		s = s.afterCrash("half way")
		s.postPieces(shuffled[60:], 30) // as a gateway does that isn't sure
		s.checkEverything("all readings")

		s.renew("bearing-7", "11:15:00", `{"mean":0.2,"standard_deviation":0.3}`)
		renewed := s.snapshotMoving()
		s.renew("by mistake", "11:30:00", `{"vague":{}}`)
		s.checkEverything("renewed")
		s = s.afterCrash("renewed")
		if _, err := s.quantities.WithdrawRenewal(t.Context(), &leadlinev1.WithdrawRenewalRequest{Id: "compressor-2/bearing", RequestId: "by mistake"}); err != nil {
			t.Fatal(err)
		}
		wantSameBeliefs(t, "a renewal withdrawn", s.snapshotMoving(), renewed)

		corrected := strings.Replace(thermometers[0].declaration, `"bias":-0.1`, `"bias":-0.25`, 1)
		s.correct("probe-1", corrected)
		s.checkEverything("corrected")
		s.call("DELETE", "/v1/instruments/probe-2", "").ok()
		s.wantRetired("probe-2")
		s.checkEverything("retired")
		s = s.afterCrash("retired")
		before := s.snapshotMoving()
		s = s.restart()
		wantSameBeliefs(t, "after a restart", s.snapshotMoving(), before)
		wantSameBeliefs(t, "seed "+fmt.Sprint(seed)+": the same in order", inOrder(t, all, corrected), before)
	}
}

// inOrder gives a fresh service the end of the story: what is in force, and the
// readings in canonical order.
func inOrder(t *testing.T, all []posted, corrected string) map[string]*leadlinev1.Belief {
	s := startMoving(t)
	s.declareInstrument("probe-1", corrected)
	s.renew("bearing-7", "11:15:00", `{"mean":0.2,"standard_deviation":0.3}`)
	slices.SortFunc(all, func(a, b posted) int {
		return cmp.Or(strings.Compare(a.Time, b.Time), strings.Compare(a.Instrument, b.Instrument), strings.Compare(a.ID, b.ID))
	})
	s.postAll(all)
	return s.snapshotMoving()
}

// postPieces posts in batches of up to nine, in turn over HTTP and gRPC; the first
// of the readings are known already.
func (s *service) postPieces(readings []posted, known int) {
	s.t.Helper()
	applied, duplicate := 0, 0
	post := [...]func([]posted) *leadlinev1.PostReadingsResponse{s.postHTTP, s.postGRPC}
	for i, from := 0, 0; from < len(readings); i++ {
		to := min(from+1+i%9, len(readings))
		response := post[i%2](readings[from:to])
		applied, duplicate = applied+int(response.GetAppliedCount()), duplicate+int(response.GetDuplicateCount())
		from = to
	}
	if duplicate != known || applied != len(readings)-known {
		s.t.Fatalf("%d readings applied and %d known, want %d and %d", applied, duplicate, len(readings)-known, known)
	}
}

func (s *service) renew(request, clock, prior string) {
	s.t.Helper()
	path := quantityPath("compressor-2/bearing") + ":renew"
	body := `{"time":"2026-03-01T` + clock + `Z","reason":"bearing replaced","prior":` + prior + `,"request_id":"` + request + `"}`
	first := s.call("POST", path, body).ok().body
	if again := s.call("POST", path, body).ok().body; again != first {
		s.t.Errorf("renewal sent again: %s, first %s", again, first)
	}
}

// correct redeclares an instrument over gRPC and waits until nothing is being
// rebuilt.
func (s *service) correct(id, declaration string) {
	s.t.Helper()
	m := new(leadlinev1.Instrument)
	if err := protojson.Unmarshal([]byte(declaration), m); err != nil {
		s.t.Fatal(err)
	}
	got, err := s.instruments.DeclareInstrument(s.t.Context(), &leadlinev1.DeclareInstrumentRequest{Id: id, Instrument: m})
	if err != nil {
		s.t.Fatal(err)
	}
	if got.GetRevision() != 2 || int(got.GetQuantityCount()) != len(movingQuantities) {
		s.t.Errorf("corrected: %v", got)
	}
	for deadline := time.Now().Add(patience); ; {
		s.call("GET", "/v1/instruments/"+id, "").into(got)
		if got.GetRebuildingCount() == 0 {
			return
		}
		if time.Now().After(deadline) {
			s.t.Fatalf("%d beliefs are still being rebuilt", got.GetRebuildingCount())
		}
	}
}

// wantRetired posts by a retired instrument, which changes no belief.
func (s *service) wantRetired(id string) {
	s.t.Helper()
	before := s.snapshotMoving()
	late := []posted{{Quantity: "brine/return", Value: 0.5, Instrument: id, Time: rfc3339(noon)}}
	for _, response := range []*leadlinev1.PostReadingsResponse{s.postHTTP(late), s.postGRPC(late)} {
		if r := response.GetResults()[0]; r.GetReason() != "INSTRUMENT_RETIRED" || r.GetStatus() != leadlinev1.Reading_REFUSED {
			s.t.Errorf("%v", r)
		} else {
			checkSentence(s.t, r.GetDetail(), "instrument")
		}
	}
	wantSameBeliefs(s.t, "readings by a retired instrument", s.snapshotMoving(), before)
}

// checkEverything compares belief, forecast, budget and page over both protocols.
func (s *service) checkEverything(stage string) {
	s.t.Helper()
	for _, q := range movingQuantities {
		s.beliefText(q.id, time.Time{}) // until nothing is being rebuilt
		s.settle(q.id, q.declaration)
	}
	p := s.scrape()
	for _, q := range movingQuantities {
		b := s.belief(q.id, p.instant(s.t))
		for name, x := range series(b) {
			if got := p.number(s.t, name); math.Float64bits(got) != math.Float64bits(x) {
				s.t.Errorf("%s: page has %s %v, belief says %v", stage, name, got, x)
			}
		}
		s.checkNamed(b, p)
		if b.Mean == nil || b.StandardDeviation == nil {
			s.t.Errorf("%s: nothing is known of %s", stage, q.id)
		}
		s.checkForecast(stage, q.id)
		s.checkBudget(stage, q.id)
	}
}

// checkForecast compares each step of a forecast with the belief at its time.
func (s *service) checkForecast(stage, id string) {
	s.t.Helper()
	f := new(leadlinev1.Forecast)
	s.call("GET", quantityPath(id)+"/forecast?steps=3&horizon=5400s", "").into(f)
	overGRPC, err := s.beliefs.ForecastBelief(s.t.Context(), &leadlinev1.ForecastBeliefRequest{
		Quantity: id, Horizon: durationpb.New(90 * time.Minute), Steps: proto.Int32(3),
	})
	if err != nil || !proto.Equal(f, overGRPC) {
		s.t.Errorf("%s: forecast of %s over HTTP\n%v\nand over gRPC\n%v, %v", stage, id, f, overGRPC, err)
	}
	if len(f.GetSteps()) != 3 || f.GetTimeToBreach() == nil {
		s.t.Fatalf("%s: forecast %v", stage, f)
	}
	crossed := 0.0
	for _, step := range f.GetSteps() {
		b := s.belief(id, step.GetTime().AsTime())
		want := &leadlinev1.Forecast_Step{
			Time: b.GetTime(), Mean: b.Mean, StandardDeviation: b.StandardDeviation, Interval: b.GetInterval(), Breach: b.GetBreach(), Crossed: step.GetCrossed(),
		}
		if !proto.Equal(step, want) {
			s.t.Errorf("%s: forecast of %s\n%v\nthe belief then is\n%v", stage, id, step, want)
		}
		// Having crossed by then is at least as likely as being outside then.
		if c := step.GetCrossed().GetEither(); c < crossed || c < b.GetBreach().GetEither()-1e-3 {
			s.t.Errorf("%s: %s has crossed with %v after %v, and is outside with %v", stage, id, c, crossed, b.GetBreach().GetEither())
		} else {
			crossed = c
		}
	}
	if got := f.GetTimeToBreach().GetProbability(); got != crossed {
		s.t.Errorf("%s: %s crosses with %v within the horizon, and with %v by its end", stage, id, got, crossed)
	}
}

// checkBudget sums the parts of a budget.
func (s *service) checkBudget(stage, id string) {
	s.t.Helper()
	budget := new(leadlinev1.Budget)
	s.call("GET", quantityPath(id)+"/belief:budget", "").into(budget)
	overGRPC, err := s.beliefs.GetBudget(s.t.Context(), &leadlinev1.GetBudgetRequest{Quantity: id, Time: timestamppb.New(budget.GetTime().AsTime())})
	if err != nil || !proto.Equal(budget, overGRPC) {
		s.t.Errorf("%s: budget of %s over HTTP\n%v\nand over gRPC\n%v, %v", stage, id, budget, overGRPC, err)
	}
	sum, shares := 0.0, 0.0
	for _, p := range budget.GetParts() {
		if p.GetVariance() < 0 || p.GetShare() > 1 {
			s.t.Errorf("%s: part %v", stage, p)
		}
		sum, shares = sum+p.GetVariance(), shares+p.GetShare()
	}
	b := s.belief(id, budget.GetTime().AsTime())
	wantNear(s.t, stage+": sum of the parts of "+id, sum, square(b.GetStandardDeviation()), 1e-9)
	wantNear(s.t, stage+": sum of the shares of "+id, shares, 1, 1e-9)
	wantNear(s.t, stage+": variance of "+id, budget.GetVariance(), sum, 1e-9)
}

// snapshotMoving is every belief, now and at ten, without what differs between
// ledgers.
func (s *service) snapshotMoving() map[string]*leadlinev1.Belief {
	s.t.Helper()
	all := map[string]*leadlinev1.Belief{}
	for _, q := range movingQuantities {
		for _, at := range []time.Time{noon.Add(-90 * time.Minute), noon.Add(time.Hour)} {
			b := s.belief(q.id, at)
			b.Revision, b.LedgerPosition = 0, 0
			all[q.id+" at "+at.Format("15:04")] = b
		}
	}
	return all
}

func wantSameBeliefs(t testing.TB, what string, got, want map[string]*leadlinev1.Belief) {
	t.Helper()
	for id, b := range want {
		if !proto.Equal(got[id], b) {
			t.Errorf("%s: belief of %s\n%v\nwant\n%v", what, id, got[id], b)
		}
	}
}

// afterCrash goes on with what the file held, and finds the same there.
func (s *service) afterCrash(stage string) *service {
	s.t.Helper()
	before := s.snapshotMoving()
	s = s.abandon()
	wantSameBeliefs(s.t, stage+", after a crash", s.snapshotMoving(), before)
	return s
}
