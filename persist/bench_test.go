package persist_test

import (
	"encoding/binary"
	"fmt"
	"path/filepath"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
	"leadline.example/persist"
)

// BenchmarkAppend compares groups of readings with the bare bbolt loop of as
// many 64-byte values under sequential 8-byte keys, both synced. The two take
// turns, so that the disk treats them alike.
func BenchmarkAppend(b *testing.B) {
	for _, n := range []int{1, 100, 1000} {
		b.Run(fmt.Sprintf("records=%d", n), func(b *testing.B) {
			dir := b.TempDir()
			l, err := persist.Open(persist.Options{Path: filepath.Join(dir, persist.FileName)})
			if err != nil {
				b.Fatal(err)
			}
			defer l.Close()
			bare := newBareLoop(b, filepath.Join(dir, "bare"), n)
			defer bare.db.Close()
			g := &engine.Group{Records: readings(n)}
			var ours, theirs time.Duration
			b.ReportAllocs()
			for b.Loop() {
				began := time.Now()
				if err := l.Append(g); err != nil {
					b.Fatal(err)
				}
				ours += time.Since(began)
				began = time.Now()
				bare.step(b)
				theirs += time.Since(began)
			}
			b.ReportMetric(float64(b.N*n)/ours.Seconds(), "records/s")
			b.ReportMetric(float64(b.N*n)/theirs.Seconds(), "bare/s")
			b.ReportMetric(theirs.Seconds()/ours.Seconds(), "ratio")
		})
	}
}

// readings returns readings as a gateway sends them, with IDs of 16 bytes.
func readings(n int) []engine.Record {
	records := make([]engine.Record, n)
	at := engine.InstantOf(time.Now())
	for i := range records {
		records[i] = engine.Record{
			Kind: engine.KindReading, ReceiveTime: at, RequestID: "9f1c2f5e-5f3f-4c7e-9a53-0d0c6f2c7a11",
			Number: engine.QuantityNumber(i%1000 + 1), Revision: 1,
			Reading: engine.Reading{
				Value: 8 + float64(i%700)*0.01, HasTime: true, Time: at - engine.Instant((n-i)*137_003_000),
				ID: engine.ReadingID(fmt.Sprintf("gw1-%012d", i)),
			},
		}
	}
	return records
}

type bareLoop struct {
	db    *bolt.DB
	n     int
	next  uint64
	value []byte
}

var bareBucket = []byte("records")

func newBareLoop(b *testing.B, path string, n int) *bareLoop {
	db, err := bolt.Open(path, 0o600, &bolt.Options{
		FreelistType: bolt.FreelistMapType, NoFreelistSync: true, InitialMmapSize: 1 << 30,
	})
	if err != nil {
		b.Fatal(err)
	}
	if err := db.Update(func(tx *bolt.Tx) error { _, err := tx.CreateBucket(bareBucket); return err }); err != nil {
		b.Fatal(err)
	}
	return &bareLoop{db: db, n: n, value: make([]byte, 64)}
}

func (l *bareLoop) step(b *testing.B) {
	if err := l.db.Update(func(tx *bolt.Tx) error {
		bucket := tx.Bucket(bareBucket)
		bucket.FillPercent = 0.95
		for range l.n {
			l.next++
			if err := bucket.Put(binary.BigEndian.AppendUint64(nil, l.next), l.value); err != nil {
				return err
			}
		}
		return nil
	}); err != nil {
		b.Fatal(err)
	}
}

// BenchmarkReplay reads a ledger of groups of 1000.
func BenchmarkReplay(b *testing.B) {
	const groups, n = 100, 1000
	l, err := persist.Open(persist.Options{Path: filepath.Join(b.TempDir(), persist.FileName)})
	if err != nil {
		b.Fatal(err)
	}
	defer l.Close()
	g := &engine.Group{Records: readings(n)}
	for range groups {
		if err := l.Append(g); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportAllocs()
	for b.Loop() {
		if err := l.Replay(1, func(*engine.Record) error { return nil }); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*groups*n), "ns/record")
	b.ReportMetric(float64(l.Stats().Bytes)/(groups*n), "B/record")
}
