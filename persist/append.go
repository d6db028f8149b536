package persist

import (
	"errors"
	"fmt"
	"io/fs"
	"strings"
	"syscall"
	"time"

	bolt "go.etcd.io/bbolt"
	berrors "go.etcd.io/bbolt/errors"

	"leadline.example/engine"
)

// Append implements engine.Ledger. A group without records and checkpoint
// makes a commit too, so that a caller can try whether the file takes writes.
//
// After a failure that isn't engine.ErrDiskFull, a salvage is begun.
func (l *Ledger) Append(g *engine.Group) error {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.closed {
		return ErrClosed
	}
	if l.failure != nil {
		return fmt.Errorf("an earlier append failed: %w", l.failure)
	}
	began := time.Now()
	h, err := l.stamp(g)
	if err != nil {
		return l.fail(err)
	}
	if len(g.Records) > 0 {
		h.hash = l.encoder.encode(g.Records, h.hash)
	}
	ledgerBytes, checkpointBytes, err := l.commit(g, h)
	if err != nil {
		return l.fail(err)
	}
	l.stale = false
	l.acknowledged.Store(h)
	l.options.OnCommit(time.Since(began), len(g.Records), ledgerBytes, checkpointBytes)
	return nil
}

// stamp gives the records their positions and the commit time and returns the
// head to be, but for the hash.
func (l *Ledger) stamp(g *engine.Group) (*head, error) {
	h := *l.acknowledged.Load()
	if len(g.Records) > 0 {
		h.commit = engine.InstantOf(l.options.Now())
		if before := l.acknowledged.Load(); before.position > 0 {
			h.commit = max(h.commit, before.commit)
		}
	}
	clear(l.instruments)
	for i := range g.Records {
		r := &g.Records[i]
		if err := writable(r); err != nil {
			return nil, err
		}
		h.position++
		r.Position, r.CommitTime = h.position, h.commit
		h.format = max(h.format, needs(r))
		if noteLatest(l.instruments, r); r.Kind == engine.KindInstrument {
			h.instruments = max(h.instruments, r.Instrument.Number)
		}
	}
	for i := range g.Checkpoint {
		h.format = max(h.format, entryNeeds(&g.Checkpoint[i]))
	}
	if s := g.Sweep; s != nil {
		h.swept, h.segment, h.through = true, s.Segment, s.Through
	}
	return &h, nil
}

// writable tells whether a record is of a kind that this version writes, and has
// what that kind needs.
func writable(r *engine.Record) error {
	switch {
	case r.Kind < engine.KindReading || r.Kind > engine.KindStep:
		return fmt.Errorf("a record is of kind %d, which this version can't write", r.Kind)
	case r.Kind == engine.KindInstrument && (r.Instrument == nil || r.Instrument.Number == 0):
		return errors.New("a record of an instrument has none, or one without a number")
	case r.Kind == engine.KindRenewal && r.Renewal == nil:
		return errors.New("a record of a renewal has none")
	case r.Kind == engine.KindStep && r.Step == nil:
		return errors.New("a record of a step has none")
	case r.Reading.Extent > engine.ExtentBetween:
		return fmt.Errorf("a reading has extent %d, which this version can't write", r.Reading.Extent)
	}
	return nil
}

// commit writes the group, encoded before, in one transaction. A panic of
// bbolt's, which only a damaged file or a failing disk brings about, leaves its
// locks held.
func (l *Ledger) commit(g *engine.Group, h *head) (ledgerBytes, checkpointBytes int, err error) {
	var frozen *bolt.Tx
	l.stuck = true
	err = guarded(func() error {
		tx, err := l.db.Begin(true)
		if err != nil {
			return err
		}
		frozen = l.guard(tx, g)
		if ledgerBytes, checkpointBytes, err = l.put(tx, g, h); err != nil {
			tx.Rollback()
		} else {
			err = tx.Commit()
		}
		l.stuck = false
		return err
	})
	if err != nil {
		l.freeze(frozen)
	} else if frozen != nil {
		err = frozen.Rollback()
	}
	return ledgerBytes, checkpointBytes, err
}

// guard begins a read transaction of the state before the commit. If the last
// sync of the commit fails, the file's newest meta page leads to pages that the
// disk may not hold, and bbolt would go by it; this transaction doesn't.
//
// It holds off a remapping, for which the commit would wait for ever, so there
// is none when the file may outgrow the mapping. Readers then see what the
// newest meta page leads to, up to the acknowledged position.
func (l *Ledger) guard(tx *bolt.Tx, g *engine.Group) *bolt.Tx {
	const perEntry, atLeast = 64 << 10, 16 << 20 // generous: pages of the paths to each key
	summary := 0
	if g.Sweep != nil {
		summary = len(g.Sweep.Summary)
	}
	bound := tx.Size() + atLeast + int64(4*len(l.encoder.buf)+summary) + perEntry*int64(len(g.Checkpoint)+len(l.instruments))
	if l.stale || bound > l.mapped {
		return nil
	}
	frozen, err := l.db.Begin(false)
	if err != nil {
		return nil // only a closed or unmapped file: the commit will say so
	}
	return frozen
}

func (l *Ledger) freeze(tx *bolt.Tx) {
	l.frozenMu.Lock()
	defer l.frozenMu.Unlock()
	l.frozen = tx
}

func (l *Ledger) put(tx *bolt.Tx, g *engine.Group, h *head) (ledgerBytes, checkpointBytes int, err error) {
	if l.stale {
		if err := dropStale(tx, l.acknowledged.Load()); err != nil {
			return 0, 0, err
		}
	}
	if len(g.Records) > 0 {
		if ledgerBytes, err = l.encoder.put(tx); err != nil {
			return 0, 0, err
		}
	}
	if h.format > l.acknowledged.Load().format {
		if err := putFormat(tx, h.format); err != nil {
			return 0, 0, err
		}
	}
	if err := putInstruments(tx, l.instruments); err != nil {
		return 0, 0, err
	}
	if err := tx.Bucket(headBucket).Put(headKey, h.append(nil)); err != nil {
		return 0, 0, err
	}
	checkpointBytes, err = l.putCheckpoint(tx, g)
	return ledgerBytes, checkpointBytes, err
}

// put writes the encoded group and returns its bytes.
func (e *encoder) put(tx *bolt.Tx) (bytes int, err error) {
	b := tx.Bucket(ledgerBucket)
	b.FillPercent = 1 // keys are only ever added at the end
	for i := range e.chunks {
		if err := b.Put(e.key(i), e.value(i)); err != nil {
			return 0, err
		}
	}
	return len(e.buf) + len(e.keys), nil
}

// fail keeps the first failure, and has what is durable salvaged unless the
// disk is only full.
func (l *Ledger) fail(err error) error {
	if isFull(err) {
		l.failure = fmt.Errorf("%w: %w", engine.ErrDiskFull, err)
		return l.failure
	}
	l.failure = fmt.Errorf("%w: %w", engine.ErrStorageFailed, err)
	l.salvaging.Go(func() { l.options.OnSalvage(l.Salvage()) })
	return l.failure
}

// isFull tells whether a commit failed for lack of space before anything was
// synced. A sync can report a full disk too, as a bare errno; then it is
// unknown what the disk holds, and that is a failure.
func isFull(err error) bool {
	if errors.Is(err, berrors.ErrMaxSizeReached) {
		return true
	}
	var e *fs.PathError
	if errors.As(err, &e) && e.Op == "write" {
		return errors.Is(e.Err, syscall.ENOSPC) || errors.Is(e.Err, syscall.EDQUOT)
	}
	// bbolt v1.5.0 doesn't wrap the error of the truncate by which the file
	// grows (db.grow), so there is only its text to go by.
	return err != nil && strings.HasPrefix(err.Error(), "file resize error: truncate ") &&
		(strings.HasSuffix(err.Error(), syscall.ENOSPC.Error()) || strings.HasSuffix(err.Error(), syscall.EDQUOT.Error()))
}
