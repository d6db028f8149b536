package main

import (
	"encoding/binary"
	"math/rand/v2"
	"time"

	bolt "go.etcd.io/bbolt"
)

// boltLoop appends 64-byte records with sequential keys, in groups, each group
// durable: the most direct use of the library the ledger is built on.
type boltLoop struct {
	db  *bolt.DB
	key uint64
}

func openBoltLoop(path string) (*boltLoop, error) {
	db, err := bolt.Open(path, 0o600, &bolt.Options{Timeout: time.Second, FreelistType: bolt.FreelistMapType, NoFreelistSync: true, InitialMmapSize: 8 << 30})
	if err != nil {
		return nil, err
	}
	return &boltLoop{db: db}, db.Update(func(tx *bolt.Tx) error {
		_, err := tx.CreateBucket([]byte("l"))
		return err
	})
}

func (l *boltLoop) run(d time.Duration) (int, error) {
	until := time.Now().Add(d)
	total := 0
	// bbolt keeps what it is given until the commit, so each record of a group
	// has its own bytes.
	keys, values := make([]byte, 8*perMessage), make([]byte, 64*perMessage)
	source := rand.NewPCG(1, l.key)
	for time.Now().Before(until) {
		err := l.db.Update(func(tx *bolt.Tx) error {
			bucket := tx.Bucket([]byte("l"))
			bucket.FillPercent = 0.95
			for i := range perMessage {
				l.key++
				key, value := keys[8*i:8*i+8], values[64*i:64*i+64]
				binary.BigEndian.PutUint64(key, l.key)
				binary.LittleEndian.PutUint64(value, source.Uint64())
				if err := bucket.Put(key, value); err != nil {
					return err
				}
			}
			return nil
		})
		if err != nil {
			return total, err
		}
		total += perMessage
	}
	return total, nil
}
