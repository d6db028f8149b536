package persist_test

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
	"leadline.example/persist"
)

// plant is a keeper on a file with more quantities than one piece of a sweep
// has room for, and what posts to it.
type plant struct {
	path     string
	keeper   *engine.Keeper
	random   *rand.Rand
	at       time.Time
	declared int
}

func (p *plant) start(t *testing.T) {
	t.Helper()
	keeper, err := engine.New(engine.Options{
		Open:              func() (engine.Ledger, error) { return persist.Open(persist.Options{Path: p.path}) },
		CheckpointRecords: 60,
	})
	if err != nil {
		t.Fatal(err)
	}
	p.keeper = keeper
}

func (p *plant) stop(t *testing.T) {
	t.Helper()
	if err := p.keeper.Close(); err != nil {
		t.Fatal(err)
	}
}

func storeRoom(n int) engine.QuantityID {
	return engine.QuantityID(fmt.Sprintf("store_room_%d.temperature", n))
}

// work declares, declares anew, retires, and posts late and early readings.
func (p *plant) work(t *testing.T) {
	t.Helper()
	p.at = p.at.Add(time.Minute)
	receive := engine.InstantOf(p.at)
	choice := p.random.IntN(10)
	var err error
	switch {
	case p.declared < 5 || choice < 3:
		p.declared++
		err = p.declare(p.declared, receive)
	case choice == 3:
		err = p.declare(1+p.random.IntN(p.declared), receive)
	case choice == 4:
		_, err = p.keeper.Retire(context.Background(), storeRoom(1+p.random.IntN(p.declared)), engine.Condition{}, receive)
	default:
		batch := engine.Batch{Receive: receive}
		for i := range 1 + p.random.IntN(12) {
			r := engine.Reading{
				Quantity: storeRoom(1 + p.random.IntN(p.declared+1)), // the last one is unknown
				ID:       engine.ReadingID(fmt.Sprint(receive, "-", i)), Value: -18 + p.random.NormFloat64(),
				HasTime: true, Time: engine.InstantOf(p.at.Add(-time.Duration(p.random.IntN(7200)) * time.Second)),
			}
			if p.random.IntN(3) == 0 {
				r.ID, r.HasUncertainty, r.RandomStandardUncertainty = "", true, 0.2
			}
			batch.Readings = append(batch.Readings, r)
		}
		_, err = p.keeper.Post(context.Background(), batch)
	}
	if err != nil {
		t.Fatal(err)
	}
}

func (p *plant) declare(n int, receive engine.Instant) error {
	_, _, err := p.keeper.Declare(context.Background(), storeRoom(n), engine.Declaration{
		Unit:          "degC",
		Prior:         engine.Prior{Form: engine.PriorNormal, Mean: -18, StandardDeviation: 1 + p.random.Float64()},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.3},
	}, engine.Condition{}, receive)
	return err
}

func newPlant(t *testing.T) *plant {
	t.Logf("-seed=%d", *seed)
	return &plant{
		path: filepath.Join(t.TempDir(), persist.FileName), random: rand.New(rand.NewPCG(*seed, 2)),
		at: time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC),
	}
}

// TestAKeepersFileLacksNothing copies the file of a keeper after each of its
// answers, also within sweeps, as a killed process would leave it. Verify finds
// nothing, and a start goes on from it.
func TestAKeepersFileLacksNothing(t *testing.T) {
	p := newPlant(t)
	copied := filepath.Join(t.TempDir(), persist.FileName)
	p.start(t)
	within := 0
	for i := range 200 {
		p.work(t)
		if i%2 != 0 {
			continue
		}
		image, err := os.ReadFile(p.path)
		if err != nil {
			t.Fatal(err)
		}
		restore(t, copied, image)
		verified(t, copied)
		if beyondSweep(t, copied) {
			within++
		}
		if i%20 == 0 { // the life of this process ends, the next one goes on from what it left
			p.stop(t)
			restore(t, p.path, image)
			p.start(t)
		}
	}
	p.stop(t)
	verified(t, p.path)
	if within < 3 {
		t.Errorf("%d copies were taken within a sweep; want 3 at least", within)
	}
}

// beyondSweep tells whether a file has rows of a sweep that isn't complete.
func beyondSweep(t *testing.T, path string) (beyond bool) {
	t.Helper()
	db, err := bolt.Open(path, 0o600, &bolt.Options{ReadOnly: true})
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	if err := db.View(func(tx *bolt.Tx) error {
		complete := []byte{0, 0, 0, 0}
		if sweep := tx.Bucket([]byte("meta")).Get([]byte("sweep")); sweep != nil {
			binary.BigEndian.PutUint32(complete, binary.LittleEndian.Uint32(sweep[1:]))
		}
		last, _ := tx.Bucket([]byte("segments")).Cursor().Last()
		beyond = last != nil && bytes.Compare(last[:4], complete) > 0
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return beyond
}

func verified(t *testing.T, path string) {
	t.Helper()
	var out bytes.Buffer
	if err := persist.Verify(path, &out); err != nil {
		t.Fatalf("%v\n%s", err, &out)
	}
}

// TestMissingKeyIsFound deletes keys of the checkpoint, one at a time. Verify
// names the quantity, and so does a start where it would miss the key.
func TestMissingKeyIsFound(t *testing.T) {
	p := newPlant(t)
	p.start(t)
	for range 120 {
		p.work(t)
	}
	p.stop(t)
	image, err := os.ReadFile(p.path)
	if err != nil {
		t.Fatal(err)
	}
	last := []byte{0, 0, 0, byte(p.declared)}
	for _, c := range []struct {
		name    string
		buckets []string
		key     func(keys [][]byte) []byte
		number  func(key []byte) byte
		starts  bool // a start can't tell
	}{
		{"the first declaration", []string{"quantities"}, first, number, false},
		{"a declaration", []string{"quantities"}, middle, number, false},
		{"the last declaration", []string{"quantities"}, final, number, false},
		{"the first state", []string{"states"}, first, number, false},
		{"a state", []string{"states"}, middle, number, false},
		{"the last state", []string{"states"}, final, number, false},
		{"the first quantity", []string{"quantities", "states"}, first, number, false},
		{"a quantity", []string{"quantities", "states"}, middle, number, false},
		{"the last quantity", []string{"quantities", "states"}, func([][]byte) []byte { return last }, number, true},
		{"the first rows", []string{"segments"}, first, numberOfRows, true},
		{"some rows", []string{"segments"}, middle, numberOfRows, true},
		{"the last rows", []string{"segments"}, final, numberOfRows, true},
	} {
		t.Run(c.name, func(t *testing.T) {
			restore(t, p.path, image)
			var key []byte
			for _, bucket := range c.buckets {
				change(t, p.path, bucket, func(b *bolt.Bucket) error {
					key = c.key(keys(b))
					return b.Delete(key)
				})
			}
			named := fmt.Sprintf("quantity %d ", c.number(key))
			var out bytes.Buffer
			if err := persist.Verify(p.path, &out); !errors.Is(err, persist.ErrDamaged) || !strings.Contains(err.Error(), named) {
				t.Errorf("Verify: %v; want ErrDamaged that names %s\n%s", err, named, &out)
			}
			keeper, err := engine.New(engine.Options{
				Open: func() (engine.Ledger, error) { return persist.Open(persist.Options{Path: p.path}) },
			})
			if err == nil {
				keeper.Close()
			}
			if !c.starts && (!errors.Is(err, persist.ErrDamaged) || !strings.Contains(err.Error(), named)) {
				t.Errorf("a start: %v; want ErrDamaged that names %s", err, named)
			}
		})
	}
}

func keys(b *bolt.Bucket) (keys [][]byte) {
	c := b.Cursor()
	for key, _ := c.First(); key != nil; key, _ = c.Next() {
		keys = append(keys, bytes.Clone(key))
	}
	return keys
}

func first(keys [][]byte) []byte  { return keys[0] }
func middle(keys [][]byte) []byte { return keys[len(keys)/2] }
func final(keys [][]byte) []byte  { return keys[len(keys)-1] }

func number(key []byte) byte       { return key[3] }
func numberOfRows(key []byte) byte { return key[7] }
