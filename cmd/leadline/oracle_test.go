package main

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"net/http"
	"net/url"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

// identity is what makes two readings the same one.
type identity struct {
	quantity engine.QuantityID
	id       engine.ReadingID
}

// stored is a reading as the service lists it.
type stored struct {
	Quantity  string
	Value     float64
	Time      time.Time
	ReadingID string `json:"reading_id"`
	Status    string
	By        string `json:"instrument"`
	Occasion  string
}

// listApplied lists the applied readings of a quantity in [start, end).
func listApplied(ctx context.Context, base string, id engine.QuantityID, start, end engine.Instant) ([]stored, error) {
	query := url.Values{
		"status": {"APPLIED"}, "page_size": {"1000"}, "start": {start.String()}, "end": {end.String()},
	}
	var all []stored
	for {
		var page struct {
			Readings      []stored
			NextPageToken string `json:"next_page_token"`
		}
		address := base + "/v1/quantities/" + string(id) + "/readings?" + query.Encode()
		if err := call(ctx, http.DefaultClient, http.MethodGet, address, nil, &page); err != nil {
			return nil, err
		}
		all = append(all, page.Readings...)
		if page.NextPageToken == "" {
			return all, nil
		}
		query.Set("page_token", page.NextPageToken)
	}
}

// checkStored compares what the service lists in [start, end) with the
// journals, in which by now every reading is answered.
func checkStored(ctx context.Context, base string, journals []*journal, start, end engine.Instant) error {
	var listed []stored
	for _, item := range crashPlan {
		readings, err := listApplied(ctx, base, item.id, start, end)
		if err != nil {
			return err
		}
		listed = append(listed, readings...)
	}
	sent := map[identity]entry{}
	for _, j := range journals {
		for _, e := range j.entries {
			if !e.answered {
				return fmt.Errorf("reading %s was never answered", e.id)
			}
			if e.time >= start && e.time < end {
				sent[identity{e.quantity, e.id}] = e
			}
		}
	}
	return compareStored(sent, listed)
}

// compareStored tells whether every reading sent is listed once, as it was
// sent, and nothing else is. It takes what it finds out of sent.
func compareStored(sent map[identity]entry, listed []stored) error {
	for _, r := range listed {
		key := identity{engine.QuantityID(r.Quantity), engine.ReadingID(r.ReadingID)}
		e, ok := sent[key]
		if !ok {
			return fmt.Errorf("reading %s of %s is listed, but was listed before or never sent", r.ReadingID, r.Quantity)
		}
		if engine.InstantOf(r.Time) != e.time || r.Value != e.value || r.By != string(e.by) || r.Occasion != e.occasion {
			return fmt.Errorf("reading %s of %s is listed as %v at %v by %q on %q, sent was %v at %v by %q on %q",
				r.ReadingID, r.Quantity, r.Value, r.Time, r.By, r.Occasion, e.value, e.time, e.by, e.occasion)
		}
		delete(sent, key)
	}
	for key := range sent {
		return fmt.Errorf("%d acknowledged readings are lost, %v among them", len(sent), key)
	}
	return nil
}

// believed is what the comparison needs of a belief.
type believed struct {
	Mean              float64
	StandardDeviation float64 `json:"standard_deviation"`
	Interval          struct{ Lower, Upper float64 }
	ReadingCount      int `json:"reading_count"`
	Rebuilding        bool
}

// settledBelief asks for a belief until no rebuild is under way.
func settledBelief(ctx context.Context, base string, id engine.QuantityID, at engine.Instant) (believed, error) {
	address := base + "/v1/quantities/" + string(id) + "/belief?time=" + url.QueryEscape(at.String())
	again := time.NewTicker(10 * time.Millisecond)
	defer again.Stop()
	for {
		var b believed
		if err := call(ctx, http.DefaultClient, http.MethodGet, address, nil, &b); err != nil {
			return b, err
		}
		if !b.Rebuilding {
			return b, nil
		}
		select {
		case <-ctx.Done():
			return b, fmt.Errorf("%s is still rebuilding: %w", id, ctx.Err())
		case <-again.C:
		}
	}
}

// checkBeliefs compares every belief of the service with two others: that of a
// fresh keeper which gets the same readings shuffled in batches, bit by bit,
// and, for known repeatability, that of a plain filter, to 1e-9 of the
// standard deviation.
func checkBeliefs(ctx context.Context, base string, journals []*journal, at engine.Instant, random *rand.Rand) error {
	fresh, err := freshKeeper(ctx, journals, at, random)
	if err != nil {
		return err
	}
	for _, item := range crashPlan {
		got, err := settledBelief(ctx, base, item.id, at)
		if err != nil {
			return err
		}
		want, err := freshBelief(ctx, fresh, item.id, at)
		if err != nil {
			return err
		}
		if got != want {
			return fmt.Errorf("%s: belief after the restarts %+v, belief of the same readings afresh %+v", item.id, got, want)
		}
		if err := checkPlain(item, got, journals, at); err != nil {
			return err
		}
	}
	return fresh.Close()
}

func freshKeeper(ctx context.Context, journals []*journal, at engine.Instant, random *rand.Rand) (*engine.Keeper, error) {
	now := at.Time()
	memory := ledgertest.NewMemory(func() time.Time { return now })
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) { return memory, nil }})
	if err != nil {
		return nil, err
	}
	for _, i := range crashInstruments {
		if _, _, err := keeper.DeclareInstrument(ctx, i.id, i.declaration, engine.Condition{}, at); err != nil {
			return nil, err
		}
	}
	for _, item := range crashPlan {
		if _, _, err := keeper.Declare(ctx, item.id, item.declaration, engine.Condition{}, at); err != nil {
			return nil, err
		}
	}
	var readings []engine.Reading
	for _, j := range journals {
		for _, e := range j.entries {
			readings = append(readings, e.reading())
		}
	}
	random.Shuffle(len(readings), func(i, k int) { readings[i], readings[k] = readings[k], readings[i] })
	for batch := range slices.Chunk(readings, 5000) {
		if _, err := keeper.Post(ctx, engine.Batch{Readings: batch, Receive: at}); err != nil {
			return nil, err
		}
	}
	return keeper, nil
}

func freshBelief(ctx context.Context, k *engine.Keeper, id engine.QuantityID, at engine.Instant) (believed, error) {
	again := time.NewTicker(10 * time.Millisecond)
	defer again.Stop()
	for {
		b, err := k.Belief(ctx, id, engine.BeliefQuery{Now: at, HasTime: true, Time: at})
		if err != nil {
			return believed{}, err
		}
		if !b.Rebuilding {
			return believedOf(b), nil
		}
		select {
		case <-ctx.Done():
			return believed{}, ctx.Err()
		case <-again.C:
		}
	}
}

// believedOf leaves at 0 what doesn't exist, as the wire does.
func believedOf(b engine.Belief) believed {
	out := believed{ReadingCount: b.ReadingCount}
	if mean, ok := b.Level.Mean(); ok {
		out.Mean = mean
	}
	if sd, ok := b.Level.StandardDeviation(); ok {
		out.StandardDeviation = sd
	}
	out.Interval.Lower, out.Interval.Upper = b.Lower, b.Upper
	return out
}

// checkPlain compares with the textbook filter for a level that walks, started
// from the prior, and with the closed form of a bias, see checkBiased. Source: West and Harrison 1997, Bayesian Forecasting and
// Dynamic Models, 2.2 (from memory); with no walk it is the precision-weighted
// mean (Gelman et al. 2013, Bayesian Data Analysis, 2.5; from memory).
func checkPlain(item crashItem, got believed, journals []*journal, at engine.Instant) error {
	d := item.declaration
	if d.Repeatability.Learned() {
		return nil
	}
	readings := canonical(item.id, journals)
	if item.by != "" {
		return checkBiased(item, got, readings)
	}
	mean, precision := d.Prior.Mean, 0.0
	if d.Prior.Form == engine.PriorNormal {
		precision = 1 / (d.Prior.StandardDeviation * d.Prior.StandardDeviation)
	}
	perNanosecond := 0.0
	if d.Dynamics.Form == engine.DynamicsRandomWalk {
		perNanosecond = d.Dynamics.StandardDeviation * d.Dynamics.StandardDeviation / float64(d.Dynamics.Per)
	}
	move := func(from, to engine.Instant) {
		if precision > 0 {
			precision = 1 / (1/precision + perNanosecond*to.Sub(from))
		}
	}
	last := at
	if len(readings) > 0 {
		last = readings[0].time // where the prior holds
	}
	weight := 1 / (d.Repeatability.StandardDeviation * d.Repeatability.StandardDeviation)
	for _, e := range readings {
		move(last, e.time)
		last = e.time
		precision += weight
		mean += weight / precision * (e.value - mean)
	}
	move(last, at)
	sd := 1 / math.Sqrt(precision)
	if math.Abs(got.Mean-mean) > 1e-9*sd || math.Abs(got.StandardDeviation-sd) > 1e-9*sd {
		return fmt.Errorf("%s: belief N(%v, %v), plain filter N(%v, %v)", item.id, got.Mean, got.StandardDeviation, mean, sd)
	}
	return nil
}

// checkBiased compares with what n readings by one instrument say of a level that
// stays: their mean has variance r^2/n + u^2, of noise and bias, and then precisions
// add (JCGM 100:2008, 5.1.2, and Gelman et al. 2013, 2.5; from memory). A trend is
// compared with a fresh keeper alone: the engine's tests have its oracle.
func checkBiased(item crashItem, got believed, readings []entry) error {
	d := item.declaration
	if d.Dynamics.Form != engine.DynamicsConstant || len(readings) == 0 {
		return nil
	}
	i := slices.IndexFunc(crashInstruments, func(i crashInstrument) bool { return i.id == item.by })
	calibration := crashInstruments[i].declaration.Calibrations[0]
	n, mean := float64(len(readings)), -calibration.Bias
	for _, e := range readings {
		mean += e.value / n
	}
	r, u, s := d.Repeatability.StandardDeviation, calibration.BiasStandardUncertainty, d.Prior.StandardDeviation
	weight := 1 / (r*r/n + u*u)
	sd := 1 / math.Sqrt(1/(s*s)+weight)
	mean = sd * sd * (d.Prior.Mean/(s*s) + weight*mean)
	if math.Abs(got.Mean-mean) > 1e-9*sd || math.Abs(got.StandardDeviation-sd) > 1e-9*sd {
		return fmt.Errorf("%s: belief N(%v, %v), by the closed form N(%v, %v)", item.id, got.Mean, got.StandardDeviation, mean, sd)
	}
	return nil
}

// canonical returns a quantity's readings in canonical order.
func canonical(id engine.QuantityID, journals []*journal) []entry {
	var readings []entry
	for _, j := range journals {
		for _, e := range j.entries {
			if e.quantity == id {
				readings = append(readings, e)
			}
		}
	}
	slices.SortFunc(readings, func(a, b entry) int {
		return cmp.Or(cmp.Compare(a.time, b.time), cmp.Compare(a.by, b.by), cmp.Compare(a.id, b.id))
	})
	return readings
}

// TestOracleNoticesLossAndDoubling shows that the comparison can fail.
func TestOracleNoticesLossAndDoubling(t *testing.T) {
	at := engine.Instant(1e18)
	one := entry{quantity: "q", id: "c-0", time: at, value: 0.8, answered: true}
	listed := stored{Quantity: "q", ReadingID: "c-0", Time: at.Time(), Value: 0.8}
	moved, changed, foreign, byAnother := listed, listed, listed, listed
	moved.Time = moved.Time.Add(1)
	changed.Value = math.Nextafter(0.8, 1)
	foreign.ReadingID = "c-1"
	byAnother.By = "photometer"
	for _, tt := range []struct {
		name   string
		listed []stored
		sound  bool
		why    string
	}{
		{"as sent", []stored{listed}, true, "nothing is wrong"},
		{"lost", nil, false, "an acknowledged reading must be there"},
		{"doubled", []stored{listed, listed}, false, "a reading counts once"},
		{"moved", []stored{moved}, false, "one nanosecond later is another time"},
		{"changed", []stored{changed}, false, "the next float is another value"},
		{"by another", []stored{byAnother}, false, "an instrument brings its own errors"},
		{"foreign", []stored{listed, foreign}, false, "nobody sent the second one"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			err := compareStored(map[identity]entry{{one.quantity, one.id}: one}, tt.listed)
			if (err == nil) != tt.sound {
				t.Errorf("compareStored gives %v, although %s", err, tt.why)
			}
		})
	}
}
