package persist_test

import (
	"bytes"
	"encoding/binary"
	"errors"
	"flag"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
)

var (
	everyByte = flag.Bool("every-byte", false, "flip every byte of the file, not one in some dozens")
	seed      = flag.Uint64("seed", 1, "seed of the random choices")
)

// written makes a small closed ledger with some checkpoint and returns its
// bytes and records.
func written(t *testing.T) (image []byte, records []engine.Record) {
	t.Helper()
	path := filepath.Join(t.TempDir(), persist.FileName)
	l := openAt(t, path)
	rows := ledgertest.ExtentRows(1, 40)
	for i, group := range [][]engine.Record{
		ledgertest.Readings(1, rows[:1]),
		append(ledgertest.Readings(1, rows[1:]), ledgertest.Records(100, 21)...),
		ledgertest.Records(200, 1),
		slices.Concat(ledgertest.Records(300, 30), ledgertest.FurtherRecords(0, 24), ledgertest.WiderRecords(0, 12)),
	} {
		g := &engine.Group{Records: group}
		if i == 2 {
			g.Checkpoint = append(ledgertest.Entries(1, 60), engine.CheckpointEntry{Number: 1, Segment: 1, Rows: rows})
			g.Sweep = &engine.Sweep{Segment: 1, Through: 40, Summary: []byte("summary")}
		}
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		records = append(records, g.Records...)
	}
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	image, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return image, records
}

// read opens a ledger and reads all of it; the instruments come last.
func read(path string) (records []engine.Record, rows []engine.Row, instruments []engine.Record, err error) {
	l, err := persist.Open(persist.Options{Path: path})
	if err != nil {
		return nil, nil, nil, err
	}
	defer l.Close()
	err = l.Replay(1, func(r *engine.Record) error { records = append(records, *r); return nil })
	if err == nil {
		err = l.Rows(1, engine.MinInstant, func(c []engine.Row) error { rows = append(rows, c...); return nil })
	}
	if err == nil {
		err = l.Instruments(func(r *engine.Record) error { instruments = append(instruments, *r); return nil })
	}
	return records, rows, instruments, err
}

// live tells which pages of the image the last transaction refers to.
func live(t *testing.T, path string) (pages []int, size int) {
	t.Helper()
	db, err := bolt.Open(path, 0o600, &bolt.Options{ReadOnly: true, PreLoadFreelist: true})
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	if err := db.View(func(tx *bolt.Tx) error {
		for id := 2; ; id++ {
			info, err := tx.Page(id)
			if err != nil || info == nil {
				return err
			}
			if id == 2 {
				pages = append(pages, 0, 1)
			}
			if info.Type == "freelist" || info.Type == "leaf" || info.Type == "branch" {
				pages = append(pages, id)
				for range info.OverflowCount {
					id++
					pages = append(pages, id)
				}
			}
		}
	}); err != nil {
		t.Fatal(err)
	}
	return pages, db.Info().PageSize
}

// TestFlippedByteIsFound flips bytes of the pages in use, one at a time. Verify
// finds the damage, or nothing that was written differs; and in no case does
// reading give anything but what was written, or what is missing at the end.
func TestFlippedByteIsFound(t *testing.T) {
	image, records := written(t)
	rows := ledgertest.ExtentRows(1, 40)
	path := filepath.Join(t.TempDir(), persist.FileName)
	restore(t, path, image)
	pages, size := live(t, path)
	random := rand.New(rand.NewPCG(*seed, 0))
	t.Logf("-seed=%d, pages %v", *seed, pages)
	found, unused := 0, 0
	for _, page := range pages {
		for at := page * size; at < (page+1)*size; at++ {
			if !*everyByte && random.IntN(48) != 0 {
				continue
			}
			write(t, path, at, image[at]^1<<random.IntN(8))
			verdict := persist.Verify(path, io.Discard)
			gotRecords, gotRows, gotInstruments, err := read(path)
			if verdict != nil && !errors.Is(verdict, persist.ErrDamaged) && !errors.Is(verdict, persist.ErrForeign) && !errors.Is(verdict, persist.ErrNewer) {
				t.Errorf("byte %d: %v", at, verdict)
			}
			if verdict == nil && (err != nil || len(gotRecords) != len(records) || len(gotRows) != len(rows)) {
				t.Errorf("byte %d: Verify finds nothing, but reading gives %d records, %d rows, %v", at, len(gotRecords), len(gotRows), err)
			}
			if d := cmp.Diff(records[:min(len(records), len(gotRecords))], gotRecords, cmpopts.EquateEmpty()); d != "" {
				t.Errorf("byte %d: wrong records (-want +got):\n%s", at, d)
			}
			if err == nil && len(gotRecords) != len(records) {
				t.Errorf("byte %d: %d of %d records without an error", at, len(gotRecords), len(records))
			}
			if d := cmp.Diff(rows[:min(len(rows), len(gotRows))], gotRows, cmpopts.EquateEmpty()); d != "" {
				t.Errorf("byte %d: wrong rows (-want +got):\n%s", at, d)
			}
			if d := cmp.Diff(ledgertest.LatestOf(records), gotInstruments); d != "" && err == nil {
				t.Errorf("byte %d: wrong instruments (-want +got):\n%s", at, d)
			}
			write(t, path, at, image[at])
			if verdict != nil {
				found++
			} else {
				unused++
			}
		}
	}
	t.Logf("%d flips found, %d in unused bytes", found, unused)
	if found == 0 {
		t.Error("no flip was found")
	}
}

func write(t *testing.T, path string, at int, b byte) {
	t.Helper()
	f, err := os.OpenFile(path, os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	_, err = f.WriteAt([]byte{b}, int64(at))
	if err := errors.Join(err, f.Close()); err != nil {
		t.Fatal(err)
	}
}

func restore(t *testing.T, path string, image []byte) {
	t.Helper()
	if err := os.WriteFile(path, image, 0o600); err != nil {
		t.Fatal(err)
	}
}

// TestVerifyNamesEveryDamagedGroup damages two groups of five and deletes one.
func TestVerifyNamesEveryDamagedGroup(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l, err := persist.Open(persist.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	for i := range 6 {
		if err := l.Append(&engine.Group{Records: ledgertest.Records(100*i, 10)}); err != nil {
			t.Fatal(err)
		}
	}
	l.Close()
	change(t, path, "ledger", func(b *bolt.Bucket) error {
		for _, p := range []uint64{11, 31} {
			key := binary.BigEndian.AppendUint64(nil, p)
			v := bytes.Clone(b.Get(key))
			v[len(v)-1] ^= 1 // in the last record
			if err := b.Put(key, v); err != nil {
				return err
			}
		}
		return b.Delete(binary.BigEndian.AppendUint64(nil, 51))
	})
	var out bytes.Buffer
	err = persist.Verify(path, &out)
	var d *persist.Damage
	if !errors.As(err, &d) || d.Position < 11 || d.Position > 20 {
		t.Errorf("the first damage is %v; want it in 11 to 20", err)
	}
	lines := strings.Split(out.String(), "\n")
	for i, wanted := range []string{"damage at position 20: ", "damage at position 40: "} {
		if !strings.HasPrefix(lines[i], wanted) {
			t.Errorf("line %d is %q; want %q...", i+1, lines[i], wanted)
		}
	}
	if !strings.Contains(out.String(), "damaged groups 2,") {
		t.Errorf("the totals don't say 2 damaged groups:\n%s", &out)
	}
}

func change(t *testing.T, path, bucket string, fn func(b *bolt.Bucket) error) {
	t.Helper()
	db, err := bolt.Open(path, 0o600, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(db.Update(func(tx *bolt.Tx) error { return fn(tx.Bucket([]byte(bucket))) }), db.Close()); err != nil {
		t.Fatal(err)
	}
}

// TestVerifyFindsWhatFitsTheChecksums: a group taken out of the middle, and one
// replaced by another sound one, break the chain.
func TestVerifyFindsWhatFitsTheChecksums(t *testing.T) {
	group := func(i int) *engine.Group { return &engine.Group{Records: ledgertest.Records(10*i, 1)} }
	build := func(path string, order ...int) {
		l, err := persist.Open(persist.Options{Path: path, Now: func() time.Time { return time.Unix(1_772_366_400, 0) }})
		if err != nil {
			t.Fatal(err)
		}
		defer l.Close()
		for _, i := range order {
			if err := l.Append(group(i)); err != nil {
				t.Fatal(err)
			}
		}
	}
	dir := t.TempDir()
	one, other := filepath.Join(dir, "one"), filepath.Join(dir, "other")
	build(one, 0, 1, 2, 3, 4)
	build(other, 0, 1, 5, 3, 4)
	key := binary.BigEndian.AppendUint64(nil, 3)
	var foreign []byte
	change(t, other, "ledger", func(b *bolt.Bucket) error { foreign = bytes.Clone(b.Get(key)); return nil })
	change(t, one, "ledger", func(b *bolt.Bucket) error { return b.Put(key, foreign) })
	var d *persist.Damage
	if err := persist.Verify(one, io.Discard); !errors.As(err, &d) || d.Position != 4 {
		t.Errorf("a replaced group: %v; want damage at the group after it, position 4", err)
	}
	change(t, one, "ledger", func(b *bolt.Bucket) error { return b.Delete(key) })
	if err := persist.Verify(one, io.Discard); !errors.As(err, &d) || d.Position != 3 {
		t.Errorf("a deleted group: %v; want damage at position 3", err)
	}
	if _, err := persist.Open(persist.Options{Path: one}); !errors.Is(err, persist.ErrDamaged) {
		t.Errorf("Open of it: %v; want ErrDamaged", err)
	}
}

// TestOpenRefuses: a file that isn't a sound ledger is refused by name of what
// is wrong, and left as it is.
func TestOpenRefuses(t *testing.T) {
	image, _ := written(t)
	bare := filepath.Join(t.TempDir(), "bare")
	db, err := bolt.Open(bare, 0o600, &bolt.Options{NoFreelistSync: true})
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(db.Update(func(tx *bolt.Tx) error { _, err := tx.CreateBucket([]byte("jars")); return err }), db.Close()); err != nil {
		t.Fatal(err)
	}
	strange, err := os.ReadFile(bare)
	if err != nil {
		t.Fatal(err)
	}
	newer := filepath.Join(t.TempDir(), "newer")
	restore(t, newer, image)
	change(t, newer, "meta", func(b *bolt.Bucket) error {
		v := bytes.Clone(b.Get([]byte("format")))
		v[len(v)-1] = 200
		return b.Put([]byte("format"), v)
	})
	later, err := os.ReadFile(newer)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name  string
		image []byte
		want  error
	}{
		{"an empty file", nil, persist.ErrDamaged},
		{"text", bytes.Repeat([]byte("brine pump log\n"), 2000), persist.ErrForeign},
		{"zeros", make([]byte, 1<<16), persist.ErrForeign},
		{"another program's bbolt file", strange, persist.ErrForeign},
		{"a newer version's ledger", later, persist.ErrNewer},
		{"a ledger cut to its meta pages", image[:8192], persist.ErrDamaged},
		{"a ledger cut to three pages", image[:3*4096], persist.ErrDamaged},
		{"a ledger cut in its ninth page", image[:9*4096-100], persist.ErrDamaged},
		{"a ledger without its first byte", image[1:], persist.ErrForeign},
	} {
		t.Run(c.name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), persist.FileName)
			restore(t, path, c.image)
			if _, _, _, err := read(path); !errors.Is(err, c.want) {
				t.Errorf("Open: %v; want %v", err, c.want)
			}
			if err := persist.Verify(path, io.Discard); err == nil {
				t.Error("Verify finds nothing")
			}
			if after, err := os.ReadFile(path); err != nil || !bytes.Equal(after, c.image) {
				t.Errorf("the file has changed, %v", err)
			}
		})
	}
}
