package server

import (
	"context"
	"fmt"
	"io"
	"net/http"
	"net/http/httptest"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus/testutil/promlint"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

// scrapeTime is the clock of these tests; the page is evaluated at its whole
// millisecond, 12:00:00.123.
var scrapeTime = time.Date(2026, 3, 1, 12, 0, 0, 123_999_999, time.UTC)

func fixedClock() time.Time { return scrapeTime }

// pageFixture is a keeper in memory and its page.
type pageFixture struct {
	keeper *engine.Keeper
	page   *Metrics
}

func newPageFixture(t testing.TB, change func(*MetricsOptions)) pageFixture {
	t.Helper()
	ledger := ledgertest.NewMemory(fixedClock)
	k, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) { return ledger, nil }})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := k.Close(); err != nil {
			t.Error(err)
		}
	})
	o := MetricsOptions{Keeper: k, Observations: NewObservations(), Now: fixedClock}
	if change != nil {
		change(&o)
	}
	m, err := NewMetrics(o)
	if err != nil {
		t.Fatal(err)
	}
	return pageFixture{k, m}
}

func (f pageFixture) declare(t testing.TB, id string, d engine.Declaration) {
	t.Helper()
	if _, _, err := f.keeper.Declare(context.Background(), engine.QuantityID(id), d, engine.Condition{}, engine.InstantOf(scrapeTime)); err != nil {
		t.Fatal(err)
	}
}

// post applies readings of one quantity, a minute apart, the last at the given
// time.
func (f pageFixture) post(t testing.TB, id string, last time.Time, values ...float64) {
	t.Helper()
	b := engine.Batch{Receive: engine.InstantOf(scrapeTime)}
	for i, v := range values {
		at := last.Add(-time.Duration(len(values)-1-i) * time.Minute)
		b.Readings = append(b.Readings, engine.Reading{Quantity: engine.QuantityID(id), Value: v, HasTime: true, Time: engine.InstantOf(at)})
	}
	results, err := f.keeper.Post(context.Background(), b)
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range results {
		if r.Status != engine.Applied {
			t.Fatalf("reading of %s: %s %s", id, r.Status, r.Detail)
		}
	}
}

func (f pageFixture) scrape(t testing.TB) string {
	t.Helper()
	w := httptest.NewRecorder()
	f.page.ServeHTTP(w, httptest.NewRequest(http.MethodGet, "/metrics", nil))
	if w.Code != http.StatusOK || w.Header().Get("Content-Type") != "text/plain; version=0.0.4; charset=utf-8" {
		t.Fatalf("status %d, Content-Type %q", w.Code, w.Header().Get("Content-Type"))
	}
	return w.Body.String()
}

// An invented store room, wandering; and a dosing pump whose repeatability is
// learned.
func roomDeclaration() engine.Declaration {
	return engine.Declaration{
		Unit: "Cel", Description: "store room 2",
		Prior:         engine.Prior{Form: engine.PriorNormal, Mean: -22, StandardDeviation: 2},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.5},
		Dynamics:      engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 1, Per: time.Hour},
		Tolerance:     engine.Tolerance{HasUpper: true, Upper: -18},
	}
}

func dosingDeclaration() engine.Declaration {
	return engine.Declaration{
		Unit:          "mg/l",
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityLearnedReference},
		Tolerance:     engine.Tolerance{HasLower: true, Lower: 0.2, HasUpper: true, Upper: 0.6},
	}
}

func plantFixture(t testing.TB, change func(*MetricsOptions)) pageFixture {
	f := newPageFixture(t, change)
	f.declare(t, "room-2.temperature", roomDeclaration())
	f.declare(t, "dosing.chlorine", dosingDeclaration())
	f.declare(t, "winch.rope", engine.Declaration{Unit: "mm", Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.1}})
	f.post(t, "room-2.temperature", scrapeTime.Add(-time.Hour), -21.5, -21, -20.5)
	f.post(t, "dosing.chlorine", scrapeTime.Add(-time.Minute), 0.41, 0.43, 0.39, 0.42)
	return f
}

func TestPageGivesTheNumbersOfTheForecastAtItsInstant(t *testing.T) {
	f := newPageFixture(t, nil)
	d := roomDeclaration()
	d.BreachHorizon = 100 * time.Hour
	f.declare(t, "room-2.temperature", d)
	f.post(t, "room-2.temperature", scrapeTime.Add(-time.Hour), -21.5, -21, -20.5)
	const key = "leadline_breach_within_horizon_probability{quantity=room-2.temperature}"
	var got map[string]float64
	for looked := false; !looked; _, looked = got[key] { // a scrape asks the forecaster and doesn't wait for it
		got = seriesOf(t, f.scrape(t))
	}
	at := time.Date(2026, 3, 1, 12, 0, 0, 123_000_000, time.UTC)
	forecast, err := f.keeper.Forecast(t.Context(), "room-2.temperature", engine.ForecastQuery{Now: engine.InstantOf(at)})
	if err != nil {
		t.Fatal(err)
	}
	for key, want := range map[string]float64{
		key: forecast.Probability,
		"leadline_median_time_to_breach_seconds{quantity=room-2.temperature}": forecast.Median.Seconds(),
	} {
		if v, ok := got[key]; !ok || want <= 0 || v != want {
			t.Errorf("%s is %v (published: %t), want %v", key, v, ok, want)
		}
	}
}

func TestPageGivesTheNumbersOfTheBeliefAtItsInstant(t *testing.T) {
	f := plantFixture(t, nil)
	got := seriesOf(t, f.scrape(t))
	at := time.Date(2026, 3, 1, 12, 0, 0, 123_000_000, time.UTC)
	if seconds := got["leadline_evaluation_timestamp_seconds{}"]; seconds != 1772366400.123 {
		t.Fatalf("the page is evaluated at %v, want 1772366400.123", seconds)
	}
	for _, id := range []string{"room-2.temperature", "dosing.chlorine"} {
		b, err := f.keeper.Belief(context.Background(), engine.QuantityID(id), engine.BeliefQuery{
			Now: engine.InstantOf(scrapeTime), HasTime: true, Time: engine.InstantOf(at)})
		if err != nil {
			t.Fatal(err)
		}
		mean, _ := b.Level.Mean()
		sd, _ := b.Level.StandardDeviation()
		unit := b.Quantity.Declaration.Unit
		for key, want := range map[string]float64{
			"leadline_posterior_mean{quantity=%s,unit=" + unit + "}":                                     mean,
			"leadline_posterior_standard_deviation{quantity=%s,unit=" + unit + "}":                       sd,
			"leadline_posterior_interval_lower{quantity=%s,unit=" + unit + ",coverage_probability=0.95}": b.Lower,
			"leadline_posterior_interval_upper{quantity=%s,unit=" + unit + ",coverage_probability=0.95}": b.Upper,
			"leadline_breach_probability{quantity=%s,side=below}":                                        b.Below,
			"leadline_breach_probability{quantity=%s,side=above}":                                        b.Above,
			"leadline_breach_probability{quantity=%s,side=either}":                                       b.Either,
			"leadline_verdict{quantity=%s,verdict=" + b.Verdict.String() + "}":                           1,
			"leadline_quantity_readings_total{quantity=%s}":                                              float64(b.ReadingCount),
		} {
			key = fmt.Sprintf(key, id)
			if v, ok := got[key]; !ok || v != want {
				t.Errorf("%s is %v (published: %t), the belief says %v", key, v, ok, want)
			}
		}
	}
}

func TestPageLeavesOutReadingsAfterItsInstant(t *testing.T) {
	f := plantFixture(t, nil)
	before := seriesOf(t, f.scrape(t))
	f.post(t, "dosing.chlorine", scrapeTime, 0.55)
	after := seriesOf(t, f.scrape(t))
	const mean = "leadline_posterior_mean{quantity=dosing.chlorine,unit=mg/l}"
	if before[mean] != after[mean] {
		t.Errorf("a reading 0.999999 ms after the page's instant moved the mean from %v to %v", before[mean], after[mean])
	}
}

func TestPageSaysNothingOfWhatIsUnknown(t *testing.T) {
	page := plantFixture(t, nil).scrape(t)
	known := []string{"quantity_info", "quantity_readings_total", "model_check", "steps_total", "outlying_readings_total"}
	for line := range strings.Lines(page) {
		name, _, _ := strings.Cut(strings.TrimPrefix(line, "leadline_"), "{")
		if strings.Contains(line, `"winch.rope"`) && !slices.Contains(known, name) {
			t.Errorf("a quantity without prior, readings and tolerance has the series %s", line)
		}
	}
}

// TestPageGivesTheNumbersOfTheModelCheck: those of the belief at the page's instant.
func TestPageGivesTheNumbersOfTheModelCheck(t *testing.T) {
	f := plantFixture(t, nil)
	got := seriesOf(t, f.scrape(t))
	b, err := f.keeper.Belief(t.Context(), "room-2.temperature", engine.BeliefQuery{Now: engine.InstantOf(scrapeTime)})
	if err != nil {
		t.Fatal(err)
	}
	if b.Check.Total.Readings != 3 {
		t.Fatalf("%d scored readings, want 3", b.Check.Total.Readings)
	}
	for key, want := range map[string]float64{
		"leadline_model_check{quantity=room-2.temperature,result=" + b.Check.Result.String() + "}": 1,
		"leadline_predictive_coverage{quantity=room-2.temperature,coverage_probability=0.5}":       b.Check.Total.Within50,
		"leadline_predictive_coverage{quantity=room-2.temperature,coverage_probability=0.95}":      b.Check.Total.Within95,
		"leadline_normal_score_mean_square{quantity=room-2.temperature}":                           b.Check.Total.MeanSquare,
		"leadline_steps_total{quantity=room-2.temperature}":                                        float64(b.Check.Steps),
		"leadline_outlying_readings_total{quantity=room-2.temperature}":                            float64(b.Check.Outlying),
	} {
		if v, ok := got[key]; !ok || v != want {
			t.Errorf("%s is %v (published: %t), the belief says %v", key, v, ok, want)
		}
	}
}

func TestRetiredQuantityVanishesFromThePage(t *testing.T) {
	f := plantFixture(t, nil)
	ctx, now := context.Background(), engine.InstantOf(scrapeTime)
	if page := f.scrape(t); !strings.Contains(page, "dosing.chlorine") {
		t.Fatal("a live quantity is not published")
	}
	if _, err := f.keeper.Retire(ctx, "dosing.chlorine", engine.Condition{}, now); err != nil {
		t.Fatal(err)
	}
	if page := f.scrape(t); strings.Contains(page, "dosing.chlorine") {
		t.Error("a retired quantity is still published")
	}
	f.declare(t, "dosing.chlorine", dosingDeclaration())
	if page := f.scrape(t); !strings.Contains(page, "dosing.chlorine") {
		t.Error("a revived quantity is not published")
	}
}

func TestPageIsBounded(t *testing.T) {
	f := plantFixture(t, func(o *MetricsOptions) { o.MaxQuantities = 2 })
	if _, err := f.keeper.Retire(context.Background(), "dosing.chlorine", engine.Condition{}, engine.InstantOf(scrapeTime)); err != nil {
		t.Fatal(err)
	}
	f.declare(t, "a", engine.Declaration{Unit: "mm", Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 1}})
	page := f.scrape(t)
	got := seriesOf(t, page)
	if n := got["leadline_unpublished_quantities{}"]; n != 1 {
		t.Errorf("%v quantities are counted as unpublished, want 1", n)
	}
	for id, want := range map[string]bool{"a": true, "room-2.temperature": true, "winch.rope": false, "dosing.chlorine": false} {
		if strings.Contains(page, `quantity="`+id+`"`) != want {
			t.Errorf("%s is published: %t, want %t (the first two live ones by ID)", id, !want, want)
		}
	}
}

func TestPageFollowsARedeclaration(t *testing.T) {
	f := plantFixture(t, nil)
	f.scrape(t) // makes the labels of the first revision
	d := roomDeclaration()
	d.Description = "store room 2, north wall"
	d.Tolerance.Upper = -19
	f.declare(t, "room-2.temperature", d)
	got := seriesOf(t, f.scrape(t))
	if _, ok := got["leadline_quantity_info{quantity=room-2.temperature,unit=Cel,description=store room 2, north wall}"]; !ok {
		t.Error("the page doesn't carry the new description")
	}
	if limit := got["leadline_tolerance_limit{quantity=room-2.temperature,unit=Cel,side=upper}"]; limit != -19 {
		t.Errorf("the upper limit is %v, want -19", limit)
	}
}

// heldLedger holds up whoever reads an index, as a rebuild does, until released.
type heldLedger struct {
	engine.Ledger
	release chan struct{}
}

func (l heldLedger) Rows(number engine.QuantityNumber, since engine.Instant, fn func([]engine.Row) error) error {
	<-l.release
	return l.Ledger.Rows(number, since, fn)
}

func TestPageCountsWhatIsBeingRebuilt(t *testing.T) {
	held := heldLedger{ledgertest.NewMemory(fixedClock), make(chan struct{})}
	k, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) { return held, nil }})
	if err != nil {
		t.Fatal(err)
	}
	m, err := NewMetrics(MetricsOptions{Keeper: k, Observations: NewObservations(), Now: fixedClock})
	if err != nil {
		t.Fatal(err)
	}
	f := pageFixture{k, m}
	d := roomDeclaration()
	f.declare(t, "room-2.temperature", d)
	f.declare(t, "room-3.temperature", d)
	many := make([]float64, 1001) // more than are folded on the spot
	f.post(t, "room-2.temperature", scrapeTime.Add(-time.Second), many...)
	d.Repeatability.StandardDeviation *= 2
	f.declare(t, "room-2.temperature", d)
	if got := seriesOf(t, f.scrape(t))["leadline_rebuilding_quantities{}"]; got != 1 {
		t.Errorf("%v quantities are being rebuilt, want 1", got)
	}
	close(held.release)
	if err := k.Close(); err != nil {
		t.Error(err)
	}
}

func TestPagePassesTheLinter(t *testing.T) {
	problems, err := promlint.New(strings.NewReader(plantFixture(t, nil).scrape(t))).Lint()
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range problems {
		t.Errorf("%s: %s", p.Metric, p.Text)
	}
}

func TestPageNegotiatesNeitherFormatNorMore(t *testing.T) {
	f := plantFixture(t, nil)
	r := httptest.NewRequest(http.MethodGet, "/metrics", nil)
	r.Header.Set("Accept", "application/openmetrics-text;version=1.0.0,text/plain;version=0.0.4;q=0.5")
	r.Header.Set("Accept-Encoding", "gzip")
	w := httptest.NewRecorder()
	f.page.ServeHTTP(w, r)
	if got := w.Header().Get("Content-Type"); got != "text/plain; version=0.0.4; charset=utf-8" {
		t.Errorf("Content-Type is %q, want the text format 0.0.4", got)
	}
	if got := w.Header().Get("Content-Encoding"); got != "gzip" {
		t.Errorf("Content-Encoding is %q, want gzip", got)
	}
}

// TestStalledScrapeHoldsUpNobody lets clients stop reading in the middle of a
// page, and asks for another and for a reading to be stored meanwhile.
func TestStalledScrapeHoldsUpNobody(t *testing.T) {
	f := plantFixture(t, nil)
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	stalled := make([]*stalledWriter, maxPages-1)
	done := make(chan struct{})
	for i := range stalled {
		stalled[i] = &stalledWriter{ResponseRecorder: httptest.NewRecorder(), reached: make(chan struct{}), release: make(chan struct{})}
		go func() {
			f.page.ServeHTTP(stalled[i], httptest.NewRequest(http.MethodGet, "/metrics", nil))
			done <- struct{}{}
		}()
		select {
		case <-stalled[i].reached:
		case <-ctx.Done():
			t.Fatal("a page doesn't reach its client while others are stalled")
		}
	}
	f.post(t, "room-2.temperature", scrapeTime.Add(-time.Second), -20)
	if got := seriesOf(t, f.scrape(t))["leadline_quantity_readings_total{quantity=room-2.temperature}"]; got != 4 {
		t.Errorf("%v readings are published, want 4", got)
	}
	for _, s := range stalled {
		close(s.release)
		<-done
		if got := seriesOf(t, s.Body.String())["leadline_quantity_readings_total{quantity=room-2.temperature}"]; got != 3 {
			t.Errorf("a stalled page says %v readings, want the 3 at its instant", got)
		}
	}
}

// stalledWriter blocks in its first write until released.
type stalledWriter struct {
	*httptest.ResponseRecorder
	reached, release chan struct{}
	started          bool
}

func (w *stalledWriter) Write(p []byte) (int, error) {
	if !w.started {
		w.started = true
		close(w.reached)
		<-w.release
	}
	return w.ResponseRecorder.Write(p)
}

func TestScrapeGivesUpWithItsClient(t *testing.T) {
	f := plantFixture(t, nil)
	for range maxPages {
		f.page.slots <- struct{}{}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	w := httptest.NewRecorder()
	f.page.ServeHTTP(w, httptest.NewRequest(http.MethodGet, "/metrics", nil).WithContext(ctx))
	if w.Body.Len() != 0 {
		t.Errorf("%d bytes were written to a client who has gone", w.Body.Len())
	}
}

// TestConnectionOutlivesThePage scrapes twice over one connection with a short
// deadline: the deadline of the first page must not cut the second.
func TestConnectionOutlivesThePage(t *testing.T) {
	f := plantFixture(t, func(o *MetricsOptions) { o.WriteTimeout = time.Minute })
	server := httptest.NewServer(f.page)
	defer server.Close()
	for i := range 2 {
		response, err := server.Client().Get(server.URL)
		if err != nil {
			t.Fatal(err)
		}
		body, err := io.ReadAll(response.Body)
		if err != nil {
			t.Fatalf("page %d: %v", i, err)
		}
		response.Body.Close()
		if _, ok := seriesOf(t, string(body))["leadline_ready{}"]; !ok {
			t.Errorf("page %d has no leadline_ready at its end", i)
		}
	}
}

func TestMetricsOptionsAreChecked(t *testing.T) {
	f := plantFixture(t, nil)
	whole := MetricsOptions{Keeper: f.keeper, Observations: NewObservations(), Now: fixedClock}
	for _, tt := range []struct {
		name   string
		change func(*MetricsOptions)
		want   string
	}{
		{"no keeper", func(o *MetricsOptions) { o.Keeper = nil }, "Keeper"},
		{"no observations", func(o *MetricsOptions) { o.Observations = nil }, "Observations"},
		{"no clock", func(o *MetricsOptions) { o.Now = nil }, "Now"},
		{"negative bound", func(o *MetricsOptions) { o.MaxQuantities = -1 }, "MaxQuantities"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			o := whole
			tt.change(&o)
			if _, err := NewMetrics(o); err == nil || !strings.Contains(err.Error(), tt.want) {
				t.Errorf("error is %v, want one that names %s", err, tt.want)
			}
		})
	}
}
