package persist_test

import (
	"errors"
	"fmt"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
)

// TestFullDisk: at the bound on the file's size an append fails as a full disk,
// the handle refuses more, and a reopened ledger has all that was acknowledged
// and goes on once there is room.
func TestFullDisk(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l, err := persist.Open(persist.Options{Path: path, MaxSize: 4 << 20})
	if err != nil {
		t.Fatal(err)
	}
	var written []engine.Record
	for err == nil {
		g := &engine.Group{Records: longRecords(len(written), 100)}
		if err = l.Append(g); err == nil {
			written = append(written, g.Records...)
		}
		if len(written) > 100_000 {
			t.Fatal("the bound on the size has no effect")
		}
	}
	t.Logf("%d records fit", len(written))
	if !errors.Is(err, engine.ErrDiskFull) || errors.Is(err, engine.ErrStorageFailed) {
		t.Fatalf("at the bound: %v; want ErrDiskFull", err)
	}
	if err := l.Append(&engine.Group{}); !errors.Is(err, engine.ErrDiskFull) {
		t.Errorf("the handle appends after a failure: %v", err)
	}
	sameRecords(t, written, l)
	if _, err := l.Salvage(); err == nil {
		t.Error("a full disk was salvaged")
	}
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	l = openAt(t, path)
	sameRecords(t, written, l)
	g := &engine.Group{Records: longRecords(len(written), 100)}
	if err := l.Append(g); err != nil {
		t.Fatal(err)
	}
	sameRecords(t, append(written, g.Records...), l)
}

// longRecords returns refusals of 4 KiB, to fill a file soon.
func longRecords(seed, n int) []engine.Record {
	records := ledgertest.Records(seed, n)
	for i := range records {
		records[i] = records[i%7]
		records[i].Kind, records[i].Quantity, records[i].Declaration = engine.KindRefusal, "", nil
		records[i].Reason, records[i].Detail = engine.NotSupported, strings.Repeat("no such ", 512)
	}
	return records
}

func sameRecords(t *testing.T, want []engine.Record, l engine.Ledger) {
	t.Helper()
	if got := ledgertest.Replayed(t, l, 1); !reflect.DeepEqual(want, got) { // cmp alone takes seconds
		t.Fatalf("records (-want +got):\n%s", cmp.Diff(want, got))
	}
}

// TestHeldLedger: a second opener gets a sentence, and the file once it is free.
func TestHeldLedger(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l := openAt(t, path)
	if _, err := persist.Open(persist.Options{Path: path}); !errors.Is(err, persist.ErrHeld) {
		t.Fatalf("a held ledger: %v; want ErrHeld", err)
	}
	l.Close()
	openAt(t, path)
}

// TestCommitTimeNeverGoesBack whatever the clock does, also over a restart.
func TestCommitTimeNeverGoesBack(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	noon := time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)
	clock := noon
	var l *persist.Ledger
	for i, c := range []struct{ clock, want time.Duration }{{0, 0}, {-time.Hour, 0}, {time.Minute, time.Minute}, {-24 * time.Hour, time.Minute}} {
		clock = noon.Add(c.clock)
		if l != nil {
			l.Close()
		}
		var err error
		if l, err = persist.Open(persist.Options{Path: path, Now: func() time.Time { return clock }}); err != nil {
			t.Fatal(err)
		}
		g := &engine.Group{Records: ledgertest.Records(i, 2)}
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		if got := g.Records[1].CommitTime; got != engine.InstantOf(noon.Add(c.want)) {
			t.Errorf("group %d: commit time %v, want %v", i+1, got, noon.Add(c.want))
		}
	}
	if s := l.Stats(); s.Position != 8 || s.CommitTime != engine.InstantOf(noon.Add(time.Minute)) || s.Bytes == 0 {
		t.Errorf("stats are %+v", s)
	}
	l.Close()
}

// TestOnCommitIsTold of each commit.
func TestOnCommitIsTold(t *testing.T) {
	var got string
	l, err := persist.Open(persist.Options{
		Path: filepath.Join(t.TempDir(), persist.FileName),
		OnCommit: func(took time.Duration, records, ledgerBytes, checkpointBytes int) {
			got = fmt.Sprint(took > 0, records, ledgerBytes > 0, checkpointBytes > 0)
		},
	})
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	if err := l.Append(&engine.Group{Records: ledgertest.Records(0, 3)}); err != nil || got != "true 3 true false" {
		t.Errorf("told %s, %v", got, err)
	}
	if err := l.Append(&engine.Group{Checkpoint: []engine.CheckpointEntry{{Number: 1, State: []byte("s"), Through: 1}}}); err != nil || got != "true 0 false true" {
		t.Errorf("told %s, %v", got, err)
	}
}

// TestFailedCommit: after a failed write nothing is written any more, reads go
// on, and what was acknowledged is salvaged into a new file with the same hash;
// also where the file has outgrown the mapping, so that no snapshot is held.
func TestFailedCommit(t *testing.T) {
	for _, c := range []struct {
		name    string
		mapping int
	}{
		{"within the mapping", 1 << 30},
		{"beyond the mapping", 1 << 15},
	} {
		t.Run(c.name, func(t *testing.T) { testFailedCommit(t, c.mapping) })
	}
}

func testFailedCommit(t *testing.T, mapping int) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	salvaged := make(chan error, 1)
	l, err := persist.Open(persist.Options{
		Path:      path,
		OnSalvage: func(_ string, err error) { salvaged <- err },
	}.WithMapping(mapping))
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	var written []engine.Record
	for i := range 5 {
		g := &engine.Group{Records: ledgertest.Records(1000*i, 1000)}
		if i == 0 {
			g.Records = ledgertest.Readings(1, ledgertest.Rows(1, 1000))
		}
		if i == 2 {
			g.Records = slices.Concat(g.Records, ledgertest.FurtherRecords(0, 40), ledgertest.WiderRecords(0, 40))
		}
		if i == 3 {
			g.Checkpoint = append(ledgertest.Entries(1, 3000), engine.CheckpointEntry{Number: 1, Segment: 1, Rows: ledgertest.Rows(1, 100)})
			g.Sweep = &engine.Sweep{Segment: 1, Through: 100}
		}
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		written = append(written, g.Records...)
	}
	if err := l.CloseFile(); err != nil {
		t.Fatal(err)
	}
	before := l.Stats()
	sameInstruments(t, written, l)
	for range 2 {
		err := l.Append(&engine.Group{Records: ledgertest.FurtherRecords(0, 1)})
		if !errors.Is(err, engine.ErrStorageFailed) || errors.Is(err, engine.ErrDiskFull) {
			t.Fatalf("append: %v; want ErrStorageFailed", err)
		}
	}
	sameRecords(t, written, l)
	if err := <-salvaged; err != nil {
		t.Fatal(err)
	}
	if got, err := l.Salvage(); err != nil || got != path {
		t.Errorf("salvaged %q, %v; want %q", got, err, path)
	}
	sameRecords(t, written, l)
	fresh := openAt(t, path)
	sameRecords(t, written, fresh)
	sameInstruments(t, written, fresh)
	if s := fresh.Stats(); s.Hash != before.Hash || s.Through != 100 {
		t.Errorf("the salvaged ledger has hash %x and sweep %d, want %x and 100", s.Hash, s.Through, before.Hash)
	}
	if d := cmp.Diff(ledgertest.Rows(1, 100), ledgertest.AllRows(t, fresh, 1, engine.MinInstant)); d != "" {
		t.Errorf("rows (-want +got):\n%s", d)
	}
	if err := fresh.Append(&engine.Group{Records: ledgertest.Records(5000, 10)}); err != nil {
		t.Error(err)
	}
}
