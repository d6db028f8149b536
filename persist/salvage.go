package persist

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// Salvage writes what was acknowledged into a new file that takes the place of
// the old one, and returns its path. After a failed sync the pages of the last
// group may be in memory and not on the disk, and reading the file back would
// not show it; so a restart must not go by that file. The copy has the same
// groups with the same hashes, freshly written and synced.
//
// It is begun by the Append that fails, once, and Close waits for it; calling
// it again waits for that and returns the same. Reads go on meanwhile. If the
// checkpoint can't be read it is left out: a start replays the whole ledger.
func (l *Ledger) Salvage() (path string, err error) {
	l.mu.Lock()
	sound := !errors.Is(l.failure, engine.ErrStorageFailed)
	l.mu.Unlock()
	if sound {
		return "", errors.New("the ledger hasn't failed; there is nothing to salvage")
	}
	l.salvage.Do(func() {
		if l.salvageErr = l.replace(); l.salvageErr != nil {
			l.salvageErr = fmt.Errorf("salvage %s: %w", l.options.Path, l.salvageErr)
			return
		}
		l.salvaged = l.options.Path
	})
	return l.salvaged, l.salvageErr
}

// replace copies the ledger to a new file and renames that over the old.
func (l *Ledger) replace() error {
	path := l.options.Path
	f, err := os.CreateTemp(filepath.Dir(path), filepath.Base(path)+temporarySuffix)
	if err != nil {
		return err
	}
	name := f.Name()
	defer os.Remove(name) // gone by then if all went well
	if err := f.Close(); err != nil {
		return err
	}
	if err := l.copyTo(name); err != nil {
		return err
	}
	if err := os.Rename(name, path); err != nil {
		return err
	}
	return syncDirectory(path)
}

func (l *Ledger) copyTo(name string) error {
	if err := format(name); err != nil {
		return err
	}
	to, err := bolt.Open(name, 0o600, &bolt.Options{FreelistType: bolt.FreelistMapType, NoSync: true})
	if err != nil {
		return err
	}
	err = l.copyLedger(to)
	if err == nil {
		if lost := l.copyCheckpoint(to); lost != nil {
			err = clearCheckpoint(to)
		}
	}
	if err == nil {
		err = to.Sync()
	}
	return errors.Join(err, to.Close())
}

// copyLedger copies every group up to the acknowledged end, and verifies it. It
// makes the bucket of instruments anew from the records.
func (l *Ledger) copyLedger(to *bolt.DB) error {
	end := l.acknowledged.Load()
	c := newChain()
	instruments := map[engine.InstrumentNumber]engine.Position{}
	c.each = func(r *engine.Record) { noteLatest(instruments, r) }
	var s slab
	for c.next <= end.position {
		if err := l.view(func(tx *bolt.Tx) error { return s.fill(tx, c.next, end.position) }); err != nil {
			return err
		}
		err := to.Update(func(tx *bolt.Tx) error {
			b := tx.Bucket(ledgerBucket)
			b.FillPercent = 1
			for i := range s.chunks {
				if err := c.add(s.chunks[i].key[:], s.value(i)); err != nil {
					return err
				}
				if err := b.Put(s.chunks[i].key[:], s.value(i)); err != nil {
					return err
				}
			}
			return nil
		})
		if err != nil {
			return err
		}
	}
	if err := c.endAt(end); err != nil {
		return err
	}
	unswept := head{position: end.position, commit: end.commit, hash: end.hash, instruments: end.instruments}
	return to.Update(func(tx *bolt.Tx) error {
		return errors.Join(putFormat(tx, end.format), putInstruments(tx, instruments),
			tx.Bucket(headBucket).Put(headKey, unswept.append(nil)))
	})
}

// copyCheckpoint copies everything else.
func (l *Ledger) copyCheckpoint(to *bolt.DB) error {
	for _, name := range [][]byte{quantitiesBucket, statesBucket, segmentsBucket} {
		if err := l.copyBucket(to, name); err != nil {
			return err
		}
	}
	end := l.acknowledged.Load()
	if !end.swept {
		return nil
	}
	var value []byte
	if err := l.view(func(tx *bolt.Tx) error {
		value = append(value, tx.Bucket(metaBucket).Get(sweepKey)...)
		sweep, swept, err := readSweep(tx)
		if err != nil {
			return err
		}
		return end.agrees(sweep, swept)
	}); err != nil {
		return err
	}
	return to.Update(func(tx *bolt.Tx) error {
		return errors.Join(tx.Bucket(metaBucket).Put(sweepKey, value), tx.Bucket(headBucket).Put(headKey, end.append(nil)))
	})
}

func (l *Ledger) copyBucket(to *bolt.DB, name []byte) error {
	type pair struct{ key, value []byte }
	for after := []byte{}; after != nil; {
		var pairs []pair
		if err := l.view(func(tx *bolt.Tx) error {
			c := tx.Bucket(name).Cursor()
			total := 0
			key, value := c.Seek(after)
			for ; key != nil && total < sliceBytes; key, value = c.Next() {
				if _, err := unseal(key, value); err != nil {
					return err
				}
				total += len(key) + len(value)
				pairs = append(pairs, pair{append([]byte{}, key...), append([]byte{}, value...)})
			}
			after = append([]byte(nil), key...) // nil at the end
			return nil
		}); err != nil {
			return err
		}
		if err := to.Update(func(tx *bolt.Tx) error {
			b := tx.Bucket(name)
			b.FillPercent = 0.95
			for _, p := range pairs {
				if err := b.Put(p.key, p.value); err != nil {
					return err
				}
			}
			return nil
		}); err != nil {
			return err
		}
	}
	return nil
}

func clearCheckpoint(to *bolt.DB) error {
	return to.Update(func(tx *bolt.Tx) error {
		for _, name := range [][]byte{quantitiesBucket, statesBucket, segmentsBucket} {
			if err := tx.DeleteBucket(name); err != nil {
				return err
			}
			if _, err := tx.CreateBucket(name); err != nil {
				return err
			}
		}
		return tx.Bucket(metaBucket).Delete(sweepKey)
	})
}
