package engine

import (
	"fmt"
	"slices"
)

// job is a rebuild: the belief of one quantity, folded anew from all its
// readings. It works on copies and reads of the ledger, so ingest goes on.
type job struct {
	track     *Track
	model     *model // to fold under
	number    QuantityNumber
	recent    []entry // the track's rows when the job began
	count     int     // readings applied by then
	position  Position
	trimmed   Position // rows up to this need not stay in memory
	ledger    Ledger
	directory *directory

	fold   fold
	last   entry
	behind entry   // the latest reading in marks[0]
	rows   []entry // canonical
	marks  []fold
	fault  error // of the index, which the ledger made good
	err    error
}

// run does the work.
func (j *job) run() {
	all, err := loadEntries(j.ledger, j.number, j.position, j.count, j.recent)
	if err != nil {
		j.fault = err
		if all, j.err = replayEntries(j.ledger, j.directory, j.number, j.position); j.err != nil {
			return
		}
	}
	var t Track
	t.rest(j.model)
	t.reset()
	if j.err = orderTies(j.ledger, all); j.err != nil {
		return
	}
	t.history = all
	for i := range all {
		t.extend(&all[i])
		if i%trimEvery == 0 {
			t.trim(j.trimmed) // or the marks of a long life would all be in memory
		}
	}
	j.fold, j.last, j.behind, j.rows, j.marks = t.fold, t.last, t.behind, t.rows, t.marks
}

// trimEvery is how many rows a rebuild folds before it lets go of those that are
// stored.
const trimEvery = 4_096

// loadEntries returns, by time, the readings of a quantity up to a ledger
// position, of which there are count: those in the ledger's complete
// segments, which may go beyond it, and the recent ones, some of which may be
// in segments too.
func loadEntries(l Ledger, number QuantityNumber, through Position, count int, recent []entry) ([]entry, error) {
	all := slices.Clone(recent)
	known := make(map[Position]struct{}, len(recent))
	for i := range recent {
		known[recent[i].Position] = struct{}{}
	}
	err := l.Rows(number, MinInstant, func(rows []Row) error {
		for _, r := range rows {
			if _, both := known[r.Position]; !both && r.Position <= through {
				all = append(all, entry{Row: r})
			}
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	if len(all) != count {
		return nil, fmt.Errorf("the index of quantity number %d has %d readings up to position %d, not %d", number, len(all), through, count)
	}
	slices.SortFunc(all, entry.compare)
	return all, nil
}

// replayEntries is loadEntries from the records themselves, for when the index
// can't be relied on: it reads the whole ledger.
func replayEntries(l Ledger, known *directory, number QuantityNumber, through Position) ([]entry, error) {
	var all []entry
	err := l.Replay(1, func(r *Record) error {
		if r.Kind == KindReading && r.Number == number && r.Position <= through {
			all = append(all, entry{Row: rowOf(r, known.numberOf(r.Reading.Instrument)), ID: r.Reading.ID})
		}
		return nil
	})
	slices.SortFunc(all, entry.compare)
	return all, err
}

// orderTies completes the canonical order of entries sorted without their IDs:
// where times tie, the IDs are read from the ledger.
func orderTies(l Ledger, all []entry) error {
	for i := 0; i < len(all); {
		n := i + 1
		for n < len(all) && all[n].Time == all[i].Time {
			n++
		}
		if n-i > 1 {
			if err := nameEntries(l, all[i:n]); err != nil {
				return err
			}
			slices.SortFunc(all[i:n], entry.compare)
		}
		i = n
	}
	return nil
}

// nameEntries fills in the reading IDs that are missing.
func nameEntries(l Ledger, entries []entry) error {
	var at []Position
	var nameless []*entry
	for i := range entries {
		if e := &entries[i]; e.HasID && e.ID == "" {
			at, nameless = append(at, e.Position), append(nameless, e)
		}
	}
	if len(at) == 0 {
		return nil
	}
	i := 0
	return l.Records(at, func(r *Record) error {
		nameless[i].ID = r.Reading.ID
		i++
		return nil
	})
}
