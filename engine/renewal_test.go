package engine_test

import (
	"context"
	"errors"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"leadline.example/engine"
)

func renewal() engine.Renewal {
	return engine.Renewal{
		RequestID: "r1", Time: seconds(100), Reason: "new coupling",
		Prior: engine.Prior{Form: engine.PriorNormal, Mean: 50, StandardDeviation: 2},
	}
}

// A renewal is recorded once, whatever the retries, and starts the level anew; a
// withdrawal makes it as if it had not been.
func TestRenewalIsRecordedOnceAndWithdrawn(t *testing.T) {
	r := newRig(t, engine.Options{})
	ctx := context.Background()
	r.declare(gapID, gap())
	r.post(start, reading(gapID, start, 101, "a"))
	now := engine.BeliefQuery{Now: seconds(200)}
	old := r.belief(gapID, now)
	first, err := r.keeper.Renew(ctx, gapID, renewal(), seconds(200))
	if err != nil {
		t.Fatal(err)
	}
	if again, err := r.keeper.Renew(ctx, gapID, renewal(), seconds(300)); err != nil || !cmp.Equal(again, first) {
		t.Errorf("a retry answers %+v (%v), want %+v", again, err, first)
	}
	if _, err := r.keeper.Renew(ctx, gapID, with(renewal(), func(r *engine.Renewal) { r.Time++ }), seconds(300)); err == nil {
		t.Error("another renewal under the same request ID went through")
	}
	mean := func() float64 {
		b := r.settled(gapID, now)
		m, _ := b.Level.Mean()
		return m
	}
	if m := mean(); m != 50 {
		t.Errorf("the new part's mean is %v, want 50", m)
	}
	before := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: seconds(50)})
	if err := sameBelief(before.Level, old.Level); err != nil {
		t.Errorf("before the renewal: %v", err)
	}
	r.restart(false)
	if m := mean(); m != 50 {
		t.Errorf("after a restart the new part's mean is %v, want 50", m)
	}
	if _, err := r.keeper.WithdrawRenewal(ctx, gapID, "r1", seconds(400)); err != nil {
		t.Fatal(err)
	}
	again, err := r.keeper.WithdrawRenewal(ctx, gapID, "r1", seconds(500))
	if err != nil || !again.Withdrawn || again.WithdrawTime != seconds(400) {
		t.Errorf("a second withdrawal answers %+v (%v)", again, err)
	}
	if b := r.settled(gapID, now); b.Level != old.Level {
		t.Errorf("withdrawn, the level is %+v, want %+v", b.Level, old.Level)
	}
	r.restart(true)
	if all, err := r.keeper.Renewals(gapID); err != nil || len(all) != 1 || !cmp.Equal(all[0], again) {
		t.Errorf("got %+v (%v), want the one withdrawn", all, err)
	}
}

func TestRenewalIsChecked(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, with(gap(), func(d *engine.Declaration) { d.Prior.HasTime, d.Prior.Time = true, seconds(0) }))
	r.declare("learned", with(gap(), func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	}))
	for _, test := range []struct {
		id     engine.QuantityID
		field  string
		change func(*engine.Renewal)
	}{
		{"stranger", "id", func(*engine.Renewal) {}},
		{gapID, "time", func(r *engine.Renewal) { r.Time = seconds(100 + 301) }},
		{gapID, "prior.time", func(r *engine.Renewal) { r.Time = seconds(-1) }},
		{gapID, "prior.time", func(r *engine.Renewal) { r.Prior.HasTime = true }},
		{gapID, "prior.standard_deviation", func(r *engine.Renewal) { r.Prior.StandardDeviation = 0 }},
		{gapID, "reason", func(r *engine.Renewal) { r.Reason = "\n" }},
		{gapID, "request_id", func(r *engine.Renewal) { r.RequestID = "\xff" }},
		{gapID, "slope", func(r *engine.Renewal) {
			r.HasSlope, r.Slope = true, engine.Slope{StandardDeviation: 1, Per: time.Hour}
		}},
		{gapID, "slope.per", func(r *engine.Renewal) { r.HasSlope, r.Slope = true, engine.Slope{StandardDeviation: 1} }},
	} {
		var refused *engine.Error
		if _, err := r.keeper.Renew(context.Background(), test.id, with(renewal(), test.change), seconds(100)); !errors.As(err, &refused) || refused.Field != test.field {
			t.Errorf("got %v, want an objection to %s", err, test.field)
		}
	}
	if _, err := r.keeper.WithdrawRenewal(context.Background(), gapID, "none", start); err == nil {
		t.Error("a renewal that isn't there was withdrawn")
	}
	if v, err := r.keeper.Renew(context.Background(), gapID, with(renewal(), func(r *engine.Renewal) { r.RequestID = "" }), seconds(100)); err != nil || v.RequestID == "" {
		t.Errorf("without a request ID: %+v (%v), want one given", v, err)
	}
}
