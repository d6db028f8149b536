package persist

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"maps"
	"slices"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// The bucket of instruments leads to the latest record of each, so that a start
// that replays only the end of the ledger knows those declared before.

// noteLatest takes note of a record, if it is of an instrument, as the latest.
func noteLatest(latest map[engine.InstrumentNumber]engine.Position, r *engine.Record) {
	if r.Kind == engine.KindInstrument {
		latest[r.Instrument.Number] = r.Position
	}
}

// putInstruments writes the latest positions, by number.
func putInstruments(tx *bolt.Tx, latest map[engine.InstrumentNumber]engine.Position) error {
	if len(latest) == 0 {
		return nil
	}
	b, err := tx.CreateBucketIfNotExists(instrumentsBucket)
	if err != nil {
		return err
	}
	for _, n := range slices.Sorted(maps.Keys(latest)) {
		key := binary.BigEndian.AppendUint32(nil, uint32(n))
		value := binary.LittleEndian.AppendUint64([]byte{formatVersion}, uint64(latest[n]))
		if err := b.Put(key, seal(value, key, 0)); err != nil {
			return err
		}
	}
	return nil
}

func parseInstrumentKey(key, value []byte) (n engine.InstrumentNumber, at engine.Position, err error) {
	if len(key) != numberKeyBytes {
		return 0, 0, errKey
	}
	body, err := unseal(key, value)
	if err != nil {
		return 0, 0, err
	}
	if len(body) < 8 {
		return 0, 0, errors.New("it is too short")
	}
	return engine.InstrumentNumber(binary.BigEndian.Uint32(key)), engine.Position(binary.LittleEndian.Uint64(body)), nil
}

// Instruments implements engine.Ledger. It waits for an Append under way, so
// that what the bucket leads to is acknowledged.
func (l *Ledger) Instruments(fn func(*engine.Record) error) error {
	numbers, at, err := l.latestInstruments()
	if err != nil {
		return fmt.Errorf("read the instruments: %w", err)
	}
	next := 0
	return l.Records(at, func(r *engine.Record) error {
		n := numbers[next]
		next++
		if r.Kind != engine.KindInstrument || r.Instrument.Number != n {
			return fmt.Errorf("read the instruments: %w", damaged(r.Position, "it is no record of instrument %d", n))
		}
		return fn(r)
	})
}

// latestInstruments reads the bucket. Numbers are given without gaps, and the head
// says how many there are, so one that lacks shows.
func (l *Ledger) latestInstruments() (numbers []engine.InstrumentNumber, at []engine.Position, err error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	err = l.view(func(tx *bolt.Tx) error {
		h, err := readHead(tx)
		if err != nil {
			return err
		}
		if err := eachInstrument(tx, func(key, value []byte) error {
			n, position, err := parseInstrumentKey(bytes.Clone(key), value)
			if err == nil && int(n) != len(numbers)+1 {
				err = fmt.Errorf("instrument %d is missing", len(numbers)+1)
			}
			if err != nil {
				return fmt.Errorf("%w: instruments, key %x: %w", ErrDamaged, key, err)
			}
			numbers, at = append(numbers, n), append(at, position)
			return nil
		}); err != nil {
			return err
		}
		if len(numbers) != int(h.instruments) {
			return fmt.Errorf("%w: %d instruments are listed, not %d", ErrDamaged, len(numbers), h.instruments)
		}
		return nil
	})
	return numbers, at, err
}

// eachInstrument calls fn with each entry of the bucket, which may not be there yet.
func eachInstrument(tx *bolt.Tx, fn func(key, value []byte) error) error {
	if b := tx.Bucket(instrumentsBucket); b != nil {
		return b.ForEach(fn)
	}
	return nil
}

// checkInstruments reports where the bucket doesn't say what the ledger does.
func checkInstruments(recorded, listed map[engine.InstrumentNumber]engine.Position, report func(error)) {
	for _, n := range slices.Sorted(maps.Keys(recorded)) {
		if listed[n] != recorded[n] {
			report(fmt.Errorf("%w: the latest record of instrument %d is said to be at position %d, but is at %d", ErrDamaged, n, listed[n], recorded[n]))
		}
	}
	for _, n := range slices.Sorted(maps.Keys(listed)) {
		if recorded[n] == 0 {
			report(fmt.Errorf("%w: instrument %d is listed, but has no record", ErrDamaged, n))
		}
	}
}
