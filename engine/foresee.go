package engine

import (
	"sync"
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

// aheadQueue is what waits for the forecaster, first come first served, each
// quantity once.
type aheadQueue struct {
	mu      sync.Mutex // guards waiting
	waiting []aheadRequest
	wake    chan struct{} // has room for one
}

func newAheadQueue() *aheadQueue { return &aheadQueue{wake: make(chan struct{}, 1)} }

func (q *aheadQueue) add(r aheadRequest) {
	q.mu.Lock()
	q.waiting = append(q.waiting, r)
	q.mu.Unlock()
	select {
	case q.wake <- struct{}{}:
	default:
	}
}

// take returns the next request, if there is one.
func (q *aheadQueue) take() (r aheadRequest, ok bool) {
	q.mu.Lock()
	defer q.mu.Unlock()
	if ok = len(q.waiting) > 0; ok {
		r, q.waiting = q.waiting[0], q.waiting[1:]
	}
	return r, ok
}

// ask puts a quantity into the forecaster's queue, unless it waits there already.
func (k *Keeper) ask(t *Track, at Instant) {
	if t.asked.CompareAndSwap(false, true) {
		k.aheads.add(aheadRequest{t, at})
	}
}

// foreseeLoop is the forecaster's goroutine.
func (k *Keeper) foreseeLoop() {
	for {
		select {
		case <-k.aheads.wake:
		case <-k.stopping:
			return
		}
		for r, ok := k.aheads.take(); ok; r, ok = k.aheads.take() {
			select {
			case <-k.stopping:
				return
			default:
			}
			if err := r.track.foresee(r.at); err != nil {
				k.options.OnFault(err)
			}
			r.track.asked.Store(false)
		}
	}
}

// foresee finds out what the horizon holds.
func (t *Track) foresee(at Instant) error {
	v := t.View()
	at = v.latest(at)
	horizon := v.Declared().Declaration.BreachHorizon
	if horizon == 0 {
		return nil // it has been dropped since the scrape
	}
	c, err := v.crossing(at, horizon)
	if c == nil || err != nil {
		return err
	}
	a := &ahead{quantity: v.Quantity, basis: v.basis, at: at, probability: c.by(horizon).Either}
	if median := c.quantile(0.5); median >= 0 {
		a.hasMedian, a.median = true, median.Seconds()
	}
	t.ahead.Store(a)
	return nil
}
