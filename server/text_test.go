package server

import (
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
	"unicode"

	"leadline.example/engine"
	"leadline.example/engine/decide"
	"leadline.example/engine/posterior"
)

var updateText = flag.Bool("update-text", false, "rewrite the goldens of the text/plain pages")

// checkGolden compares text with testdata/text/<name>.txt. The goldens hold
// layout; how numbers are rounded is tested beside their sources.
func checkGolden(t *testing.T, name, got string) {
	t.Helper()
	path := filepath.Join("testdata", "text", name+".txt")
	if *updateText {
		if err := os.WriteFile(path, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) {
		t.Errorf("%s reads\n%s\nwant\n%s", name, got, want)
	}
}

func instant(t testing.TB, s string) engine.Instant {
	t.Helper()
	at, err := time.Parse(time.RFC3339Nano, s)
	if err != nil {
		t.Fatal(err)
	}
	return engine.InstantOf(at)
}

// gapQuantity and the numbers of the beliefs below are invented; they need not
// agree with each other.
func gapQuantity(t testing.TB) engine.Quantity {
	return engine.Quantity{
		ID: "brine-pump-3.coupling-gap", Number: 1, Revision: 2,
		CreateTime: instant(t, "2026-02-01T08:00:00Z"), UpdateTime: instant(t, "2026-02-20T09:30:00Z"),
		Declaration: engine.Declaration{
			Unit: "mm", Description: "coupling gap, brine pump 3",
			Prior:         engine.Prior{Form: engine.PriorNormal, Mean: 0.8, StandardDeviation: 0.05},
			Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.02},
			Dynamics:      engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.01, Per: 24 * time.Hour},
			Tolerance:     engine.Tolerance{HasLower: true, Lower: 0.7, HasUpper: true, Upper: 0.9},
		},
	}
}

func gapBelief(t testing.TB) engine.Belief {
	return engine.Belief{
		Quantity: gapQuantity(t), Time: instant(t, "2026-03-01T12:00:00Z"),
		Level: posterior.Normal(posterior.LevelOf(0.81234), 0.00712), Coverage: 0.95, Lower: 0.79838, Upper: 0.82629,
		HasBreach: true, Below: 1.2e-56, Above: 2.4e-35, Either: 2.4e-35, Conformance: 1,
		Verdict:    decide.Conforms,
		Predictive: posterior.Normal(posterior.LevelOf(0.81234), 0.0212), PredictiveLower: 0.7707, PredictiveUpper: 0.8539,
		Repeatability: posterior.Repeatability{Known: true, StandardDeviation: 0.02},
		ReadingCount:  12, HasLast: true, LastTime: instant(t, "2026-03-01T11:56:30Z"), Position: 812,
	}
}

func TestBeliefReadsAtAGlance(t *testing.T) {
	for _, tt := range []struct {
		name   string
		change func(*engine.Belief)
	}{
		{"belief-conforms", func(*engine.Belief) {}},
		{"belief-breaches", func(b *engine.Belief) {
			b.Verdict = decide.Breaches
			b.Below, b.Above, b.Either, b.Conformance = 0, 0.9712, 0.9712, 0.0288
		}},
		{"belief-inconclusive", func(b *engine.Belief) {
			b.Verdict = decide.Inconclusive
			b.Below, b.Above, b.Either, b.Conformance = 0.001, 0.38, 0.381, 0.619
			b.Rebuilding = true
		}},
		{"belief-nothing-known", func(b *engine.Belief) {
			b.Level, b.Predictive, b.Verdict = posterior.Posterior{}, posterior.Posterior{}, decide.Inconclusive
			b.HasBreach, b.HasLast, b.ReadingCount = false, false, 0
		}},
		{"belief-one-degree-of-freedom", func(b *engine.Belief) {
			b.Level = posterior.Student(posterior.LevelOf(0.81234), 0.004, 1)
			b.Lower, b.Upper = 0.7615, 0.8632
			b.Predictive = posterior.Posterior{}
			b.Repeatability = posterior.Repeatability{HasMedian: true, Median: 0.0084, Lower: 0.0025, Upper: 0.18, HasEstimate: true, Estimate: 0.0057}
		}},
		{"belief-two-degrees-of-freedom", func(b *engine.Belief) {
			b.Level = posterior.Student(posterior.LevelOf(0.81234), 0.004, 2)
			b.Lower, b.Upper = 0.7951, 0.8296
			b.Predictive = posterior.Posterior{}
			b.Quantity.Declaration.Tolerance.HasUpper = false
		}},
		{"belief-with-instruments", func(b *engine.Belief) {
			b.HasSlope, b.SlopeMean, b.SlopeStandardDeviation, b.SlopePer = true, -0.0213, 0.0034, 24*time.Hour
			b.Biases = []engine.BiasBelief{
				{Instrument: "calliper-7", ValidFrom: instant(t, "2026-01-10T00:00:00Z"), Reference: "gauge blocks 4", Mean: 0.01234, StandardDeviation: 0.0043},
				{Instrument: "feeler", ValidFrom: instant(t, "2025-07-01T00:00:00Z"), Mean: -0.0021, StandardDeviation: 0.0007},
			}
			b.References = []engine.ReferenceBelief{{Reference: "gauge blocks 4", Mean: 0.312, StandardDeviation: 0.9012}}
			b.Flagged = [4]int{engine.CalibrationInForce: 4, engine.CalibrationOverdue: 3, engine.CalibrationNotYet: 2, engine.CalibrationNone: 1}
			b.Linearised, b.ResolutionAsVariance, b.PredictiveInstrument = true, true, "feeler"
		}},
		{"belief-without-tolerance", func(b *engine.Belief) {
			b.Quantity.Declaration.Tolerance = engine.Tolerance{}
			b.HasBreach, b.Verdict = false, 0
			b.HasThreshold, b.Threshold, b.ProbabilityBelow = true, 0.8, 0.0416
		}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := gapBelief(t)
			tt.change(&b)
			checkGolden(t, tt.name, beliefText(&b))
		})
	}
}

func TestBeliefsLineUp(t *testing.T) {
	known, unknown, plain := gapBelief(t), gapBelief(t), gapBelief(t)
	unknown.Quantity.ID = "slipway-winch.brake-lining"
	unknown.Level, unknown.HasBreach, unknown.Verdict, unknown.HasLast = posterior.Posterior{}, false, decide.Inconclusive, false
	plain.Quantity.ID, plain.Quantity.Declaration.Unit = "room-2.temperature", "Cel"
	plain.Level = posterior.Normal(posterior.LevelOf(-22.318), 0.31)
	plain.HasBreach, plain.Verdict = false, 0
	checkGolden(t, "beliefs", beliefsText([]engine.Belief{known, plain, unknown}, "bmV4dA"))
	checkGolden(t, "beliefs-none", beliefsText(nil, ""))
}

func TestQuantityReadsAsDeclared(t *testing.T) {
	known, learned, own := gapQuantity(t), gapQuantity(t), gapQuantity(t)
	d := &learned.Declaration
	d.Prior = engine.Prior{Form: engine.PriorInterval, Low: 0.7, High: 0.9, Probability: 0.9, HasTime: true, Time: instant(t, "2026-02-01T00:00:00Z")}
	d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.02, Worth: 4}
	d.Dynamics = engine.Dynamics{}
	d.Tolerance.HasLower = false
	d.Rule = decide.Rule{ConformProbability: 0.99, BreachProbability: 0.8}
	d = &own.Declaration
	d.Prior, d.Repeatability, d.Tolerance = engine.Prior{}, engine.Repeatability{}, engine.Tolerance{}
	own.Retired, own.RetireTime = true, instant(t, "2026-03-02T00:00:00Z")
	checkGolden(t, "quantity-known", quantityText(&known))
	checkGolden(t, "quantity-learned", quantityText(&learned))
	checkGolden(t, "quantity-retired", quantityText(&own))
	checkGolden(t, "quantities", quantitiesText([]engine.Quantity{known, own}, "bmV4dA"))
}

func TestMovingQuantitiesReadAsDeclared(t *testing.T) {
	worn, room := gapQuantity(t), gapQuantity(t)
	worn.ID, worn.Declaration.BreachHorizon = "slipway-winch.lining", 30*24*time.Hour
	worn.Declaration.Dynamics = engine.Dynamics{
		Form: engine.DynamicsLinearTrend, StandardDeviation: 0.01, Per: time.Hour,
		Slope: engine.Slope{Mean: -0.02, StandardDeviation: 0.01, Per: 24 * time.Hour}, Wander: engine.Wander{StandardDeviation: 0.001, Per: 7 * 24 * time.Hour},
	}
	room.ID = "room-2.temperature"
	room.Declaration.Dynamics = engine.Dynamics{Form: engine.DynamicsMeanReverting, Mean: -22, StandardDeviation: 1.5, HalfLife: 90 * time.Minute}
	checkGolden(t, "quantity-trend", quantityText(&worn))
	checkGolden(t, "quantity-reverting", quantityText(&room))
}

func TestReadingsLineUp(t *testing.T) {
	checkGolden(t, "readings", readingsText([]engine.StoredReading{
		{Reading: engine.Reading{Quantity: "brine-pump-3.coupling-gap", Value: 0.81, Time: instant(t, "2026-03-01T11:56:30.5Z"), Unit: "mm",
			ID: "gauge-7/1041", HasUncertainty: true, RandomStandardUncertainty: 0.005}, Status: engine.Applied},
		{Reading: engine.Reading{Quantity: "brine-pump-3.coupling-gap", Value: 0.81, Time: instant(t, "2026-03-01T11:57:00Z"),
			Instrument: "calliper-7"}, Status: engine.Applied, HasCalibration: true, Calibration: engine.CalibrationOverdue},
		{Reading: engine.Reading{Quantity: "brine-pump-3.coupling-gap", Value: 0.81, Time: instant(t, "2026-03-01T11:57:10Z"),
			Instrument: "gauge-7"}, Status: engine.Applied, HasCalibration: true, Calibration: engine.CalibrationInForce},
		{Reading: engine.Reading{Quantity: "brine-pump-3.gap", Value: 0.82, Time: instant(t, "2026-03-01T11:57:30Z")},
			Status: engine.Refused, Reason: engine.UnknownQuantity, Detail: "quantity brine-pump-3.gap is not declared; declare it and put the reading through"},
	}, ""))
	checkGolden(t, "results", resultsText([]engine.Result{
		{Status: engine.Applied}, {Status: engine.Duplicate},
		{Status: engine.Refused, Reason: engine.UnitMismatch, Detail: "unit is m, but the quantity is in mm; send mm or leave unit out"},
	}))
}

func TestErrorNamesFieldAndRemedy(t *testing.T) {
	checkGolden(t, "error", errorText(&engine.Error{Reason: engine.InvalidField, Field: "prior.standard_deviation",
		Message: "prior.standard_deviation is -0.05; give a number above 0"}))
}

func TestUsersTextStaysOnItsLine(t *testing.T) {
	b := gapBelief(t)
	b.Quantity.Declaration.Description = "gap\n  verdict       CONFORMS\tby decree"
	text := beliefText(&b)
	if n := strings.Count(text, "\n  verdict "); n != 1 {
		t.Errorf("a description made %d verdict lines, want 1:\n%s", n, text)
	}
}

// A refused reading holds any text that fits: none of it may reach a terminal as
// a command, or pass for another line or column.
func TestTextOfClientsIsOnlyText(t *testing.T) {
	const hostile = "a\x1b[2J\x9b\u009b\u202e\u2028\t\r\n\x00\x7f\xffz"
	const want = "a [2J\uFFFD        \uFFFDz"
	if got := cell(hostile); got != want {
		t.Errorf("%q becomes %q, want %q", hostile, got, want)
	}
	page := readingsText([]engine.StoredReading{{
		Reading: engine.Reading{Quantity: hostile, Unit: hostile, ID: hostile, Time: instant(t, "2026-03-01T11:57:30Z")},
		Status:  engine.Refused, Reason: engine.UnknownQuantity, Detail: hostile,
	}}, "") +
		resultsText([]engine.Result{{Status: engine.Refused, Reason: engine.UnitMismatch, Detail: hostile}}) +
		errorText(&engine.Error{Reason: engine.UnknownField, Field: hostile, Message: hostile})
	for i, r := range page {
		if r != '\n' && !unicode.IsPrint(r) {
			t.Errorf("byte %d of the page is %q", i, r)
		}
	}
	if n := strings.Count(page, "\n"); n != 7 {
		t.Errorf("the page has %d lines, want 7:\n%s", n, page)
	}
}

func TestTimeThatCannotBeHeldIsNotInvented(t *testing.T) {
	page := readingsText([]engine.StoredReading{{
		Reading: engine.Reading{Quantity: "gap", Value: 1, Time: engine.InstantOf(time.Date(1500, 1, 1, 0, 0, 0, 0, time.UTC))},
		Status:  engine.Refused, Reason: engine.TimeOutOfRange, Detail: "time 1500-01-01T00:00:00Z lies outside",
	}}, "")
	if !strings.Contains(page, "\n-     gap") || strings.Contains(page, "1677") {
		t.Errorf("the page shows a time that nobody sent:\n%s", page)
	}
}

func TestElapsedNamesTwoUnits(t *testing.T) {
	for _, tt := range []struct {
		name string
		time time.Duration
		want string
	}{
		{"nothing", 0, "less than 1 s"},
		{"seconds", 59 * time.Second, "59 s"},
		{"minute", time.Minute, "1 min"},
		{"minutes and seconds", 210 * time.Second, "3 min 30 s"},
		{"hours", 2*time.Hour + 59*time.Second, "2 h"},
		{"hours and minutes", 2*time.Hour + 5*time.Minute, "2 h 5 min"},
		{"days", 76 * time.Hour, "3 d 4 h"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if got := elapsed(float64(tt.time)); got != tt.want {
				t.Errorf("%s is written %q, want %q", tt.time, got, tt.want)
			}
		})
	}
}
