package persist_test

import (
	"errors"
	"io"
	"path/filepath"
	"strings"
	"testing"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
)

// TestVerifyComparesWhatRowsHold: rows that aren't those of the readings are found by
// whichever field differs.
func TestVerifyComparesWhatRowsHold(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(r *engine.Row)
		wrong  bool
	}{
		{"nothing", func(*engine.Row) {}, false},
		{"time", func(r *engine.Row) { r.Time++ }, true},
		{"value", func(r *engine.Row) { r.Value += 0.01 }, true},
		{"uncertainty", func(r *engine.Row) { r.HasUncertainty, r.Uncertainty = true, 0.06 }, true},
		{"extent", func(r *engine.Row) { r.Extent ^= 1 }, true},
		{"upper", func(r *engine.Row) { r.Upper += 0.01 }, true},
		{"samples", func(r *engine.Row) { r.Samples++ }, true},
		{"origin, which is the engine's", func(r *engine.Row) { r.Instrument++ }, false},
	} {
		for _, at := range []int{0, 11, 17, 39} {
			path := filepath.Join(t.TempDir(), persist.FileName)
			l, err := persist.Open(persist.Options{Path: path})
			if err != nil {
				t.Fatal(err)
			}
			rows := ledgertest.ExtentRows(1, 40)
			records := ledgertest.Readings(1, rows)
			c.change(&rows[at])
			err = errors.Join(l.Append(&engine.Group{Records: records}), l.Append(&engine.Group{
				Checkpoint: append(ledgertest.Entries(1, 40), engine.CheckpointEntry{Number: 1, Segment: 1, Rows: rows}),
				Sweep:      &engine.Sweep{Segment: 1, Through: 40},
			}), l.Close())
			if err != nil {
				t.Fatal(err)
			}
			err = persist.Verify(path, io.Discard)
			if found := err != nil && strings.Contains(err.Error(), "the 40 rows of quantity 1 aren't"); found != c.wrong || !found && err != nil {
				t.Errorf("another %s in row %d: %v; want it found: %v", c.name, at, err, c.wrong)
			}
		}
	}
}
