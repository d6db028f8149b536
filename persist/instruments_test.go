package persist_test

import (
	"bytes"
	"compress/gzip"
	"encoding/binary"
	"errors"
	"io"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
)

// formatOf reads the version of a file that nobody has open.
func formatOf(t *testing.T, path string) (version uint32) {
	t.Helper()
	change(t, path, "meta", func(b *bolt.Bucket) error {
		v := b.Get([]byte("format"))
		version = binary.BigEndian.Uint32(v[len(v)-4:])
		return nil
	})
	return version
}

// TestFormatIsTheLowestThatIsNeeded, so that an older program reads what it can.
func TestFormatIsTheLowestThatIsNeeded(t *testing.T) {
	further, rows := ledgertest.FurtherRecords(0, 12), ledgertest.OriginRows(3, 4)
	occasion := further[5]
	if occasion.Reading.Occasion == "" {
		t.Fatal("the reading has no occasion")
	}
	plain := *ledgertest.Entries(1, 0)[0].Quantity
	renewed := plain
	renewed.Renewals = []engine.Renewal{*further[1].Renewal}
	wider := ledgertest.WiderRecords(0, 6)
	averaged := ledgertest.Records(0, 1)[0]
	averaged.Reading.Samples = 60
	leaking := plain
	leaking.Declaration = *wider[2].Declaration
	for _, c := range []struct {
		name string
		g    engine.Group
		want uint32
	}{
		{"nothing", engine.Group{}, 1},
		{"all that version 1 knows", engine.Group{Records: ledgertest.Records(0, 200),
			Checkpoint: []engine.CheckpointEntry{{Number: 1, Quantity: &plain}, {Number: 1, Rows: ledgertest.Rows(1, 9)}}}, 1},
		{"an instrument", engine.Group{Records: further[:1]}, 2},
		{"a renewal", engine.Group{Records: further[1:2]}, 2},
		{"a trend", engine.Group{Records: further[2:3]}, 2},
		{"mean reversion", engine.Group{Records: further[8:9]}, 2},
		{"a horizon", declares(func(d *engine.Declaration) { d.BreachHorizon = 1 }), 2},
		{"an occasion", engine.Group{Records: []engine.Record{occasion}}, 2},
		{"a quantity with a renewal", engine.Group{Checkpoint: []engine.CheckpointEntry{{Number: 1, Quantity: &renewed}}}, 2},
		{"a censored reading", engine.Group{Records: wider[1:2]}, 3},
		{"a mean of several", engine.Group{Records: []engine.Record{averaged}}, 3},
		{"an instrument of learned repeatability", engine.Group{Records: wider[3:4]}, 3},
		{"a step", engine.Group{Records: wider[4:5]}, 3},
		{"outliers", declares(func(d *engine.Declaration) { d.Outliers.Probability = 0.01 }), 3},
		{"a logarithmic scale", declares(func(d *engine.Declaration) { d.Scale = engine.ScaleLog }), 3},
		{"a floor", declares(func(d *engine.Declaration) { d.Repeatability.Floor = 0.01 }), 3},
		{"a model check", declares(func(d *engine.Declaration) { d.ModelCheck.Window = 100 }), 3},
		{"a step detection", declares(func(d *engine.Declaration) { d.StepDetection.FalseAlarmInterval = 1e6 }), 3},
		{"a quantity with outliers", engine.Group{Checkpoint: []engine.CheckpointEntry{{Number: 1, Quantity: &leaking}}}, 3},
		{"rows with extents", engine.Group{Checkpoint: []engine.CheckpointEntry{{Number: 1, Rows: ledgertest.ExtentRows(1, 4)}}}, 3},
		{"the newest before the older", engine.Group{Records: append(ledgertest.WiderRecords(1, 1), further[1:2]...)}, 3},
		{"rows of an instrument", engine.Group{Checkpoint: []engine.CheckpointEntry{{Number: 1, Rows: rows}}}, 2},
	} {
		t.Run(c.name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), persist.FileName)
			for _, g := range []*engine.Group{&c.g, {Records: ledgertest.Records(0, 3)}} { // it stays
				l, err := persist.Open(persist.Options{Path: path})
				if err != nil {
					t.Fatal(err)
				}
				if err := errors.Join(l.Append(g), l.Close()); err != nil {
					t.Fatal(err)
				}
				if got := formatOf(t, path); got != c.want {
					t.Errorf("the format is %d; want %d", got, c.want)
				}
			}
		})
	}
}

// declares returns a group of one declaration, changed from one that version 1 knows.
func declares(change func(*engine.Declaration)) engine.Group {
	d := *ledgertest.Records(3, 1)[0].Declaration
	change(&d)
	return engine.Group{Records: []engine.Record{{Kind: engine.KindDeclaration, Number: 1, Declaration: &d}}}
}

// TestFileOfVersion1IsReadAndGoesOn with a file that the first release wrote:
// the records below, then a sweep, then the rest of them.
func TestFileOfVersion1IsReadAndGoesOn(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	unpack(t, filepath.Join("testdata", "format1.db.gz"), path)
	verified(t, path)
	l := openAt(t, path)
	var written []engine.Record
	for i, r := range append(ledgertest.Readings(1, ledgertest.Rows(1, 40)), ledgertest.Records(0, 30)...) {
		r.Position, r.CommitTime = engine.Position(i+1), 1_772_366_400_000_000_000
		written = append(written, r)
	}
	sameRecords(t, written, l)
	if d := cmp.Diff(ledgertest.Rows(1, 40), ledgertest.AllRows(t, l, 1, engine.MinInstant)); d != "" {
		t.Errorf("rows (-want +got):\n%s", d)
	}
	if got := ledgertest.Checkpointed(t, l).Entries; len(got) != 5 || !cmp.Equal(got, ledgertest.Entries(5, 60)) {
		t.Errorf("%d entries of the checkpoint, or others than were written", len(got))
	}
	if got := ledgertest.Instruments(t, l); got != nil {
		t.Errorf("it has instruments: %v", got)
	}
	l.Close()
	goesOn(t, path, written, ledgertest.Records(30, 40), ledgertest.FurtherRecords(0, 30), ledgertest.WiderRecords(0, 30))
}

// goesOn appends each group to a file that has what was written, and returns that
// with what it has then.
func goesOn(t *testing.T, path string, written []engine.Record, groups ...[]engine.Record) []engine.Record {
	t.Helper()
	for _, records := range groups {
		l := openAt(t, path)
		g := &engine.Group{Records: records}
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		written = append(written, g.Records...)
		l.Close()
		verified(t, path)
		l = openAt(t, path)
		sameRecords(t, written, l)
		sameInstruments(t, written, l)
		l.Close()
	}
	return written
}

// TestFileOfVersion2IsReadAndGoesOn with a file that the release before wrote: of the
// records below all but the last ten, then a sweep, then those.
func TestFileOfVersion2IsReadAndGoesOn(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	unpack(t, filepath.Join("testdata", "format2.db.gz"), path)
	if got := formatOf(t, path); got != 2 {
		t.Fatalf("the format is %d; want 2", got)
	}
	verified(t, path)
	l := openAt(t, path)
	rows := ledgertest.OriginRows(1, 40)
	written := append(ledgertest.Readings(1, rows), ledgertest.FurtherRecords(0, 30)...)
	for i := range written {
		written[i].Position, written[i].CommitTime = engine.Position(i+1), 1_772_366_400_000_000_000
	}
	sameRecords(t, written, l)
	sameInstruments(t, written, l)
	if d := cmp.Diff(rows, ledgertest.AllRows(t, l, 1, engine.MinInstant)); d != "" {
		t.Errorf("rows (-want +got):\n%s", d)
	}
	entries := ledgertest.Entries(5, 60)
	entries[2].Quantity.Renewals = []engine.Renewal{*ledgertest.FurtherRecords(1, 1)[0].Renewal}
	if d := cmp.Diff(entries, ledgertest.Checkpointed(t, l).Entries); d != "" {
		t.Errorf("checkpoint (-want +got):\n%s", d)
	}
	l.Close()
	written = goesOn(t, path, written, ledgertest.FurtherRecords(30, 40))
	if got := formatOf(t, path); got != 2 {
		t.Errorf("the format is %d; want 2 still", got)
	}
	goesOn(t, path, written, ledgertest.WiderRecords(0, 30))
	if got := formatOf(t, path); got != 3 {
		t.Errorf("the format is %d; want 3", got)
	}
}

func sameInstruments(t *testing.T, written []engine.Record, l engine.Ledger) {
	t.Helper()
	if d := cmp.Diff(ledgertest.LatestOf(written), ledgertest.Instruments(t, l)); d != "" {
		t.Errorf("instruments (-want +got):\n%s", d)
	}
}

func unpack(t *testing.T, packed, path string) {
	t.Helper()
	f, err := os.Open(packed)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	z, err := gzip.NewReader(f)
	if err != nil {
		t.Fatal(err)
	}
	image, err := io.ReadAll(z)
	if err != nil {
		t.Fatal(err)
	}
	restore(t, path, image)
}

// TestWrongInstrumentIsFound changes what leads to the instruments, in ways that
// fit the checksums. Verify names the damage, and so does a reader where it can
// tell.
func TestWrongInstrumentIsFound(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l, err := persist.Open(persist.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	var early [][]byte // values of the bucket after the first group
	for i := range 2 {
		if err := l.Append(&engine.Group{Records: ledgertest.FurtherRecords(24*i, 24)}); err != nil {
			t.Fatal(err)
		}
		if i == 0 {
			l.Close()
			change(t, path, "instruments", func(b *bolt.Bucket) error {
				return b.ForEach(func(_, v []byte) error { early = append(early, bytes.Clone(v)); return nil })
			})
			if l, err = persist.Open(persist.Options{Path: path}); err != nil {
				t.Fatal(err)
			}
		}
	}
	l.Close()
	verified(t, path)
	image, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	key := func(n byte) []byte { return []byte{0, 0, 0, n} }
	for _, c := range []struct {
		name   string
		bucket string
		change func(b *bolt.Bucket) error
		named  string
		read   bool // a reader can't tell
	}{
		{"the first lost", "instruments", func(b *bolt.Bucket) error { return b.Delete(key(1)) }, "instrument 1 ", false},
		{"one lost", "instruments", func(b *bolt.Bucket) error { return b.Delete(key(2)) }, "instrument 2 ", false},
		{"the last lost", "instruments", func(b *bolt.Bucket) error { return b.Delete(key(4)) }, "instrument 4 ", false},
		{"an earlier record", "instruments", func(b *bolt.Bucket) error { return b.Put(key(3), early[2]) }, "instrument 3 ", true},
		{"the value of another", "instruments", func(b *bolt.Bucket) error { return b.Put(key(3), early[1]) }, "checksum", false},
		{"a key too long", "instruments", func(b *bolt.Bucket) error { return b.Put(append(key(4), 0), early[3]) }, "no key", false},
		{"all lost", "", nil, "instrument 1 ", false},
		{"an older format", "meta", func(b *bolt.Bucket) error {
			v := bytes.Clone(b.Get([]byte("format")))
			v[len(v)-1] = 1
			return b.Put([]byte("format"), v)
		}, "its format is 1", true},
	} {
		t.Run(c.name, func(t *testing.T) {
			restore(t, path, image)
			if c.bucket == "" {
				dropBucket(t, path, "instruments")
			} else {
				change(t, path, c.bucket, c.change)
			}
			var out bytes.Buffer
			if err := persist.Verify(path, &out); !errors.Is(err, persist.ErrDamaged) || !strings.Contains(err.Error(), c.named) {
				t.Errorf("Verify: %v; want ErrDamaged that names %q\n%s", err, c.named, &out)
			}
			l, err := persist.Open(persist.Options{Path: path})
			if err != nil {
				t.Fatal(err)
			}
			defer l.Close()
			err = l.Instruments(func(*engine.Record) error { return nil })
			if c.read != (err == nil) || err != nil && !errors.Is(err, persist.ErrDamaged) {
				t.Errorf("Instruments: %v; want an error that is ErrDamaged: %v", err, !c.read)
			}
		})
	}
}

func dropBucket(t *testing.T, path, name string) {
	t.Helper()
	db, err := bolt.Open(path, 0o600, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(db.Update(func(tx *bolt.Tx) error { return tx.DeleteBucket([]byte(name)) }), db.Close()); err != nil {
		t.Fatal(err)
	}
}

// TestManyInstruments: more than one page of them, declared again and again.
func TestManyInstruments(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l := openAt(t, path)
	var written []engine.Record
	for i := range 3 {
		g := &engine.Group{}
		for n := range 1000 {
			r := ledgertest.FurtherRecords(0, 1)[0]
			r.Instrument.Number = engine.InstrumentNumber((n*(2*i+1))%1000 + 1) // in another order each time
			r.Instrument.Revision = uint32(i + 1)
			g.Records = append(g.Records, r)
		}
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		written = append(written, g.Records...)
	}
	sameInstruments(t, written, l)
	l.Close()
	sameInstruments(t, written, openAt(t, path))
}
