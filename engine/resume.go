package engine

import (
	"errors"
	"fmt"
)

// Resume tries to take up writing again after a full disk: it closes the
// ledger, opens it anew and commits an empty group. It returns nil at once
// while nothing is wrong, and an error if writing is still impossible. Reads go
// on from memory meanwhile.
func (k *Keeper) Resume() error {
	k.resumes.Lock()
	defer k.resumes.Unlock()
	if err := k.Health(); !errors.Is(err, ErrDiskFull) {
		return err
	}
	done := make(chan struct{})
	c := &command{resume: true, done: func() { close(done) }}
	if err := k.enqueue(c); err != nil {
		return err
	}
	select {
	case <-done:
		return c.err
	case <-k.stopped:
		return errStopping
	}
}

// resume is Resume in the keeper's goroutine, while no group is on its way.
func (k *Keeper) resume() error {
	if !errors.Is(k.failed, ErrDiskFull) {
		return k.failed
	}
	err := k.reopen()
	if err == nil {
		err = k.ledger.Append(&Group{})
	}
	if err == nil {
		err = k.forget()
	}
	if err != nil {
		if !errors.Is(err, ErrDiskFull) {
			k.options.OnFault(err)
		}
		return err
	}
	k.failed = nil
	k.health.Store(nil)
	return nil
}

func (k *Keeper) reopen() error {
	if err := k.ledger.Close(); err != nil {
		return fmt.Errorf("close the ledger: %w", err)
	}
	l, err := k.options.Open()
	if err != nil {
		return fmt.Errorf("open the ledger again: %w", err)
	}
	k.ledger = l
	k.current.Store(&l)
	return nil
}

// forget undoes what was decided on but didn't become durable. What is durable,
// and all that is published, stays as it is.
func (k *Keeper) forget() error {
	durable := Position(k.position.Load())
	k.decidedTo = durable
	for n := len(k.byNumber); n > 0 && k.byNumber[n-1].quantity == nil; n-- {
		k.directory.Load().remove(k.byNumber[n-1].id)
		k.byNumber = k.byNumber[:n-1]
	}
	for _, t := range k.byNumber {
		t.decide(t.quantity)
		t.decidedTally = t.tally
		t.saved, t.savedQuantity = 0, nil // what the sweep under way wrote is void
	}
	k.presentInstruments()
	s := &k.sweep
	*s = sweeper{written: s.durable, durable: s.durable, trimmed: s.trimmed, trim: s.trim}
	clear(k.refusals.taken)
	from := min(durable+1, max(1, k.window.oldest()))
	k.window = newWindow(k.options.DuplicateWindow, k.options.minGeneration)
	k.window.lost = from - 1
	err := k.ledger.Replay(from, func(r *Record) error {
		k.remember(r)
		return nil
	})
	k.windowLost.Store(uint64(k.window.lost))
	return err
}
