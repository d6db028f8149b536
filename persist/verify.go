package persist

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// maxReported bounds the lines of Verify about one kind of damage.
const maxReported = 1_000

// Verify examines a whole ledger that nobody has open for writing: the checksum
// of every record, positions, commit times, the hash of every group, the
// checkpoint and the structure of pages. It writes a line for each damage it
// finds and a summary to w; its error is the first damage, or why the file
// can't be examined.
func Verify(path string, w io.Writer) error {
	db, _, err := openFile(path, bolt.Options{ReadOnly: true, PreLoadFreelist: true})
	if err != nil {
		return fmt.Errorf("verify %s: %w", path, err)
	}
	defer db.Close()
	v := verifier{w: w, chain: newChain()}
	err = guarded(func() error {
		tx, err := db.Begin(false)
		if err != nil {
			return err
		}
		defer tx.Rollback()
		return v.run(tx)
	})
	if err != nil {
		v.report(err)
	}
	if v.first != nil {
		return fmt.Errorf("verify %s: %w", path, v.first)
	}
	return nil
}

type verifier struct {
	w        io.Writer
	chain    *chain
	first    error
	reported int
	damaged  int // groups
	broken   bool
}

// report writes a damage and keeps the first.
func (v *verifier) report(err error) {
	if v.first == nil {
		v.first = err
	}
	if v.reported++; v.reported > maxReported {
		return
	}
	var d *Damage
	if errors.As(err, &d) {
		fmt.Fprintf(v.w, "damage at position %d: %v\n", d.Position, d.What)
		return
	}
	fmt.Fprintf(v.w, "damage: %v\n", err)
}

func (v *verifier) run(tx *bolt.Tx) error {
	if err := checkFormat(tx); err != nil {
		return err
	}
	v.part("ledger", func() error { return v.ledger(tx) })
	entries, states := 0, 0
	v.part("quantities", func() error {
		return v.bucket(tx, quantitiesBucket, func(key, value []byte) error {
			entries++
			return readQuantity(key, value, new(engine.CheckpointEntry))
		})
	})
	v.part("states", func() error {
		return v.bucket(tx, statesBucket, func(key, value []byte) error {
			states++
			return v.state(key, value)
		})
	})
	rows := 0
	v.part("segments", func() error {
		return v.bucket(tx, segmentsBucket, func(key, value []byte) error {
			n, err := checkRows(key, value)
			rows += n
			return err
		})
	})
	v.part("sweep", func() error { return v.sweep(tx) })
	v.part("pages", func() error { return v.pages(tx) })
	if v.reported > maxReported {
		fmt.Fprintf(v.w, "and %d more\n", v.reported-maxReported)
	}
	fmt.Fprintf(v.w, "records %d, groups %d, damaged groups %d, quantities %d, states %d, rows %d\n",
		v.chain.next-1, v.chain.groups, v.damaged, entries, states, rows)
	fmt.Fprintf(v.w, "hash %x\n", v.chain.hash)
	return nil
}

// part runs one part so that pages that can't be read don't hide the others.
func (v *verifier) part(name string, fn func() error) {
	finished := false
	err := guarded(func() error {
		err := fn()
		finished = true
		return err
	})
	v.broken = v.broken || !finished
	if err != nil {
		v.report(fmt.Errorf("%s: %w", name, err))
	}
}

// ledger examines the groups. After damage it goes on with the next group,
// whose hash it can verify if the damaged one's is known.
func (v *verifier) ledger(tx *bolt.Tx) error {
	lost := false
	c := tx.Bucket(ledgerBucket).Cursor()
	for key, value := c.First(); key != nil; key, value = c.Next() {
		chunk, err := parseChunk(key, value)
		begins := err == nil && chunk.first
		if lost && !begins {
			continue
		}
		if lost {
			v.chain.resume(&chunk)
		}
		lost = !v.add(key, value)
		if lost && begins && !(v.chain.within && v.chain.first == chunk.position) {
			// The damage is before this group.
			v.chain.resume(&chunk)
			lost = !v.add(key, value)
		}
	}
	h, err := readHead(tx)
	if err != nil {
		return err
	}
	return v.chain.endAt(h)
}

// add examines a chunk and tells whether the next one can be examined.
func (v *verifier) add(key, value []byte) bool {
	err := v.chain.add(key, value)
	if err == nil {
		return true
	}
	v.damaged++
	v.report(err)
	return !v.chain.within && v.chain.next > positionOf(key) // only the hash is wrong
}

// pages has bbolt check how the pages hang together. It does so in a goroutine
// of its own, where a fault would end the process, and believes the number of
// overflow pages; so it is left out where these would do harm.
func (v *verifier) pages(tx *bolt.Tx) error {
	if v.reported > 0 {
		return nil
	}
	for id := 2; ; id++ {
		info, err := tx.Page(id)
		if err != nil || info == nil {
			break
		}
		if info.Type == "free" {
			continue
		}
		if int64(id+info.OverflowCount) >= tx.Size()/int64(tx.DB().Info().PageSize) {
			return fmt.Errorf("%w: page %d claims %d pages more than there are", ErrDamaged, id, info.OverflowCount)
		}
		id += info.OverflowCount
	}
	for err := range tx.Check() {
		v.report(fmt.Errorf("%w: %w", ErrDamaged, err))
	}
	return nil
}

func positionOf(key []byte) engine.Position {
	if len(key) != 8 {
		return 0
	}
	return engine.Position(binary.BigEndian.Uint64(key))
}

// bucket examines every value of a bucket.
func (v *verifier) bucket(tx *bolt.Tx, name []byte, examine func(key, value []byte) error) error {
	c := tx.Bucket(name).Cursor()
	for key, value := c.First(); key != nil; key, value = c.Next() {
		if err := examine(key, value); err != nil {
			v.report(fmt.Errorf("%w: %s, key %x: %w", ErrDamaged, name, key, err))
		}
	}
	return nil
}

func (v *verifier) state(key, value []byte) error {
	var e engine.CheckpointEntry
	if err := readState(key, value, &e); err != nil {
		return err
	}
	if e.Through >= v.chain.next {
		return fmt.Errorf("the state includes position %d, but the ledger ends at %d", e.Through, v.chain.next-1)
	}
	return nil
}

func checkRows(key, value []byte) (int, error) {
	chunk, err := parseRows(key, value)
	if err != nil {
		return 0, err
	}
	_, err = chunk.appendTo(nil)
	return chunk.count, err
}

func (v *verifier) sweep(tx *bolt.Tx) error {
	s, _, err := readSweep(tx)
	if err == nil && s.Through >= v.chain.next {
		err = fmt.Errorf("%w: it includes position %d, but the ledger ends at %d", ErrDamaged, s.Through, v.chain.next-1)
	}
	return err
}
