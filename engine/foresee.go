package engine

import (
	"time"

	"leadline.example/engine/posterior"
)

// ahead is what was last found out of the time to come, for the metrics.
type ahead struct {
	basis       *model
	quantity    *Quantity
	at          Instant
	probability float64
	hasMedian   bool
	median      float64 // seconds
}

// maxAheads is how many quantities can wait for the forecaster.
const maxAheads = 1_024

// lookAhead adds to f what the declared horizon holds, and asks the forecaster to
// look anew if that was found out more than a minute, or a hundredth of the horizon,
// ago: it takes far longer than all the rest, and a scrape must not wait for it.
func (k *Keeper) lookAhead(v *View, f *Figures, at Instant) {
	horizon := v.Declared().Declaration.BreachHorizon
	if horizon == 0 || !f.HasBreach {
		return
	}
	if v.basis.motion.Form == posterior.MotionConstant {
		f.HasHorizon, f.HorizonProbability, f.HasMedian = true, f.Breach.Either, f.Breach.Either >= 0.5
		return
	}
	a := v.track.ahead.Load()
	known := a != nil && a.quantity == v.Quantity && a.basis == v.basis
	if !known || at.Sub(a.at) > min(float64(time.Minute), float64(horizon)/100) {
		k.ask(v.track, at)
	}
	if known {
		f.HasHorizon, f.HorizonProbability, f.HasMedian, f.MedianSeconds = true, a.probability, a.hasMedian, a.median
	}
}

// aheadRequest asks what a quantity's horizon holds from an instant on.
type aheadRequest struct {
	track *Track
	at    Instant
}

// ask puts a quantity into the forecaster's queue, unless it waits there already
// or the queue is full: then the next scrape asks again.
func (k *Keeper) ask(t *Track, at Instant) {
	if !t.asked.CompareAndSwap(false, true) {
		return
	}
	select {
	case k.aheads <- aheadRequest{t, at}:
	default:
		t.asked.Store(false)
	}
}

// foreseeLoop is the forecaster's goroutine.
func (k *Keeper) foreseeLoop() {
	for {
		select {
		case r := <-k.aheads:
			r.track.asked.Store(false)
			if err := r.track.foresee(r.at); err != nil {
				k.options.OnFault(err)
			}
		case <-k.stopping:
			return
		}
	}
}

// foresee finds out what the horizon holds.
func (t *Track) foresee(at Instant) error {
	v := t.View()
	if v.HasLast {
		at = max(at, v.LastTime)
	}
	horizon := v.Declared().Declaration.BreachHorizon
	c, err := v.crossing(at, horizon)
	if c == nil || horizon == 0 || err != nil {
		return err
	}
	a := &ahead{quantity: v.Quantity, basis: v.basis, at: at, probability: c.by(horizon).Either}
	if median := c.quantile(0.5); median >= 0 {
		a.hasMedian, a.median = true, median.Seconds()
	}
	t.ahead.Store(a)
	return nil
}
