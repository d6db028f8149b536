package engine

import (
	"encoding/binary"
	"slices"
)

// sweeper writes checkpoints: it goes through the quantities by number and,
// with each group, writes the states and index rows of the next few, so that
// no commit carries much of it. When it has been through all, every record up
// to the position at which it began is in states and rows, and a start replays
// only what came later.
type sweeper struct {
	active  bool
	segment uint32   // being written, if active
	from    Position // rows after this ...
	through Position // ... and up to this belong to segment
	next    int      // index of the next track
	rows    []Row    // of the track before next, what is left of them
	chunk   uint32

	written swept    // the last complete sweep
	durable swept    // likewise, if its last group is
	trimmed Position // rows up to this may have been dropped from memory
	trim    int      // the next track to drop them from
}

// swept is what a complete sweep covers.
type swept struct {
	segment uint32   // and those before
	through Position // every applied reading up to this is in a segment
}

const (
	// A sweep begins after this many records, or after sixteen for every
	// quantity if that is more: states then cost little beside the rows.
	sweepRecords     = 1 << 16
	sweepPerQuantity = 16
	// minCheckpointBytes fill about a page.
	minCheckpointBytes = 3_000
	rowBytes           = 16
	stateBytes         = 230
	trimsPerGroup      = 1_000
)

// addCheckpoint adds the next piece of a sweep to a group: of about a third of
// the bytes of its records, so a quarter of the whole.
func (k *Keeper) addCheckpoint(w *work) {
	s := &k.sweep
	at := Position(k.position.Load())
	every := k.options.CheckpointRecords
	if every == 0 {
		every = max(sweepRecords, sweepPerQuantity*len(k.byNumber))
	}
	if !s.active && at-s.written.through >= Position(every) {
		s.begin(at)
	}
	if s.active {
		k.sweepPiece(&w.Group, max(minCheckpointBytes, w.bytes/3), s.due(at, every, len(k.byNumber)))
	}
}

func (s *sweeper) begin(at Position) {
	s.active, s.segment = true, s.written.segment+1
	s.from, s.through = s.written.through, at
	s.next, s.rows, s.chunk = 0, nil, 0
}

// due is how many tracks the sweep must be through at a position for it to end
// before the next is to begin: the budget gives way where the rows of a sweep
// take more than it allows.
func (s *sweeper) due(at Position, every, tracks int) int {
	return int(float64(tracks) * min(1, float64(at-s.through)/float64(every)))
}

// sweepPiece adds checkpoint entries to g, of about that many bytes and at least
// until that many tracks are done, and at the end what completes the sweep.
func (k *Keeper) sweepPiece(g *Group, budget, due int) {
	s := &k.sweep
	for budget > 0 || s.next < due {
		if len(s.rows) > 0 {
			budget -= s.rowsEntry(g, k.byNumber[s.next-1].number)
			continue
		}
		if s.next == len(k.byNumber) || k.byNumber[s.next].quantity == nil {
			g.Sweep = &Sweep{Segment: s.segment, Through: s.through, Summary: k.summary()}
			s.active, s.written = false, swept{s.segment, s.through}
			return
		}
		t := k.byNumber[s.next]
		s.next++
		if t.position <= s.from && t.position <= t.saved {
			continue // neither a row nor anything else since the last sweep
		}
		if t.position > t.saved {
			e := t.checkpoint()
			budget -= stateBytes + len(e.State)
			g.Checkpoint = append(g.Checkpoint, e)
		}
		s.rows, s.chunk = t.rowsBetween(s.from, s.through), 0
		for i := range s.rows {
			t.stored.Store(max(t.stored.Load(), int64(s.rows[i].Time)))
		}
	}
}

// checkpoint returns the entry of t's state.
func (t *Track) checkpoint() CheckpointEntry {
	e := CheckpointEntry{Number: t.number, State: t.appendState(nil), Through: t.position}
	if t.quantity != t.savedQuantity {
		e.Quantity = t.quantity
	}
	t.saved, t.savedQuantity = t.position, t.quantity
	return e
}

// rowsEntry adds the next chunk of rows.
func (s *sweeper) rowsEntry(g *Group, number QuantityNumber) (bytes int) {
	n := min(len(s.rows), MaxChunkRows)
	g.Checkpoint = append(g.Checkpoint, CheckpointEntry{
		Number: number, Segment: s.segment, Chunk: s.chunk, Rows: s.rows[:n:n],
	})
	s.rows = s.rows[n:]
	s.chunk++
	return n*rowBytes + 2*rowBytes
}

// rowsBetween returns the rows of the positions after from and up to through,
// in canonical order.
func (t *Track) rowsBetween(from, through Position) []Row {
	within := func(e *entry) bool { return from < e.Position && e.Position <= through }
	n, sorted, last := 0, true, (*entry)(nil)
	for i := range t.rows {
		if e := &t.rows[i]; within(e) {
			sorted = sorted && (last == nil || compareEntries(last, e) < 0)
			n, last = n+1, e
		}
	}
	source := t.rows
	if !sorted {
		source = slices.SortedFunc(slices.Values(t.rows), entry.compare)
	}
	rows := make([]Row, 0, n)
	for i := range source {
		if within(&source[i]) {
			rows = append(rows, source[i].Row)
		}
	}
	return rows
}

// landCheckpoint takes note of what a group completed.
func (k *Keeper) landCheckpoint(w *work) {
	s := &k.sweep
	if w.Sweep != nil {
		s.durable = swept{w.Sweep.Segment, w.Sweep.Through}
	}
	if k.partial != nil {
		return // which was looked up for what is trimmed now
	}
	if s.trimmed < s.durable.through {
		s.trimmed, s.trim = s.durable.through, 0
		k.trimmed.Store(uint64(s.trimmed))
	}
	for n := 0; n < trimsPerGroup && s.trim < len(k.byNumber); n++ {
		if t := k.byNumber[s.trim]; t.basis != nil {
			t.trim(s.trimmed)
		}
		s.trim++
	}
}

// finalCheckpoint completes the sweep under way and makes another of what came
// since, so that the next start has nothing to replay.
func (k *Keeper) finalCheckpoint() error {
	for range 2 {
		if at := Position(k.position.Load()); !k.sweep.active {
			if at == k.sweep.written.through {
				return nil
			}
			k.sweep.begin(at)
		}
		for k.sweep.active {
			var g Group
			k.sweepPiece(&g, maxGroupBytes, 0)
			if err := k.ledger.Append(&g); err != nil {
				return err
			}
		}
	}
	return nil
}

// Versions of the texts that are opaque to the ledger. One that changes keeps
// the decoder of the versions before it.
const (
	stateVersion   = 3
	summaryVersion = 1
)

// summary is what a sweep keeps beside the quantities: the counts and the log
// of refusals.
func (k *Keeper) summary() []byte {
	b := []byte{summaryVersion}
	b = binary.AppendUvarint(b, uint64(len(ReadingReasons)))
	for i := range ReadingReasons {
		b = binary.AppendUvarint(b, k.refused[i].Load())
	}
	b = binary.AppendUvarint(b, k.applied.Load())
	b = binary.AppendUvarint(b, k.position.Load())
	b = binary.AppendUvarint(b, uint64(k.window.oldest()))
	last := Position(0)
	for _, r := range k.refusals.all() {
		b = binary.AppendUvarint(b, uint64(r.Position-last))
		last = r.Position
	}
	return b
}
