package persist

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// Values outside the ledger bucket are a version, a body, and a checksum of
// key, version and body.

// seal appends the checksum of b[from:] with its key.
func seal(b, key []byte, from int) []byte {
	return binary.LittleEndian.AppendUint32(b, keyedSum(key, b[from:]))
}

// unseal returns the body of a value after checking it.
func unseal(key, value []byte) (body []byte, err error) {
	if len(value) < 1+4 {
		return nil, errors.New("it is too short")
	}
	end := len(value) - 4
	if keyedSum(key, value[:end]) != binary.LittleEndian.Uint32(value[end:]) {
		return nil, errors.New("its checksum doesn't match")
	}
	if value[0] > formatVersion {
		return nil, ErrNewer
	}
	return value[1:end], nil
}

func numberKey(n engine.QuantityNumber) []byte {
	return binary.BigEndian.AppendUint32(nil, uint32(n))
}

// rowsKey is the key of a chunk of rows: segment, number, chunk.
func rowsKey(segment uint32, n engine.QuantityNumber, chunk uint32) []byte {
	b := binary.BigEndian.AppendUint32(make([]byte, 0, rowsKeyBytes), segment)
	b = binary.BigEndian.AppendUint32(b, uint32(n))
	return binary.BigEndian.AppendUint32(b, chunk)
}

// Lengths of keys.
const (
	numberKeyBytes = 4
	rowsKeyBytes   = 12
)

// putCheckpoint writes the checkpoint of a group and returns its bytes.
func (l *Ledger) putCheckpoint(tx *bolt.Tx, g *engine.Group) (int, error) {
	total := 0
	l.values = l.values[:0]
	put := func(bucket, key []byte, body func([]byte) []byte) error {
		from := len(l.values)
		l.values = seal(body(append(l.values, formatVersion)), key, from)
		b := tx.Bucket(bucket)
		b.FillPercent = 0.95 // keys come in order
		total += len(key) + len(l.values) - from
		return b.Put(key, l.values[from:len(l.values):len(l.values)])
	}
	for i := range g.Checkpoint {
		if err := putEntry(&g.Checkpoint[i], put); err != nil {
			return 0, err
		}
	}
	if g.Sweep == nil {
		return total, nil
	}
	return total, put(metaBucket, sweepKey, func(b []byte) []byte {
		b = binary.LittleEndian.AppendUint32(b, g.Sweep.Segment)
		b = binary.LittleEndian.AppendUint64(b, uint64(g.Sweep.Through))
		return append(b, g.Sweep.Summary...)
	})
}

func putEntry(e *engine.CheckpointEntry, put func(bucket, key []byte, body func([]byte) []byte) error) error {
	var errs [3]error
	if e.Quantity != nil {
		errs[0] = put(quantitiesBucket, numberKey(e.Number), func(b []byte) []byte { return appendQuantity(b, e.Quantity) })
	}
	if e.State != nil {
		errs[1] = put(statesBucket, numberKey(e.Number), func(b []byte) []byte {
			return append(binary.LittleEndian.AppendUint64(b, uint64(e.Through)), e.State...)
		})
	}
	if len(e.Rows) > engine.MaxChunkRows {
		return fmt.Errorf("a chunk has %d rows; the most is %d", len(e.Rows), engine.MaxChunkRows)
	}
	if len(e.Rows) > 0 {
		errs[2] = put(segmentsBucket, rowsKey(e.Segment, e.Number, e.Chunk), func(b []byte) []byte { return appendRows(b, e.Rows) })
	}
	return errors.Join(errs[:]...)
}

// readSweep returns the last complete sweep, if there is one.
func readSweep(tx *bolt.Tx) (s engine.Sweep, found bool, err error) {
	value := tx.Bucket(metaBucket).Get(sweepKey)
	if value == nil {
		return s, false, nil
	}
	if s, err = parseSweep(value); err != nil {
		return s, false, fmt.Errorf("%w: the sweep: %w", ErrDamaged, err)
	}
	return s, true, nil
}

func parseSweep(value []byte) (s engine.Sweep, err error) {
	body, err := unseal(sweepKey, value)
	if err != nil {
		return s, err
	}
	if len(body) < 12 {
		return s, errors.New("it is too short")
	}
	s.Segment = binary.LittleEndian.Uint32(body)
	s.Through = engine.Position(binary.LittleEndian.Uint64(body[4:]))
	s.Summary = bytes.Clone(body[12:])
	return s, nil
}

// hasStale tells whether rows of an incomplete sweep are stored.
func hasStale(tx *bolt.Tx, h *head) bool {
	key, _ := tx.Bucket(segmentsBucket).Cursor().Last()
	return len(key) == rowsKeyBytes && !h.complete(binary.BigEndian.Uint32(key))
}

// dropStale deletes rows of an incomplete sweep.
func dropStale(tx *bolt.Tx, h *head) error {
	c := tx.Bucket(segmentsBucket).Cursor()
	from := uint32(0)
	if h.swept {
		from = h.segment + 1
	}
	for key, _ := c.Seek(rowsKey(from, 0, 0)); key != nil; key, _ = c.Seek(rowsKey(from, 0, 0)) {
		if err := c.Delete(); err != nil {
			return err
		}
	}
	return nil
}

// checkpointSlice is how many quantities are read in one transaction.
const checkpointSlice = 1_000

// Checkpoint implements engine.Ledger. Checksums tell that what is there is
// what was written; that nothing is missing is seen from quantity and state,
// which a sweep first writes together, number by number.
func (l *Ledger) Checkpoint(fn func(engine.CheckpointEntry) error) (engine.Sweep, error) {
	var sweep engine.Sweep
	err := l.view(func(tx *bolt.Tx) (err error) {
		sweep, _, err = readSweep(tx)
		return err
	})
	for next := uint64(1); err == nil && next <= maxNumber; {
		var entries []engine.CheckpointEntry
		if err = l.view(func(tx *bolt.Tx) (err error) {
			entries, next, err = readEntries(tx, engine.QuantityNumber(next))
			return err
		}); err != nil {
			break
		}
		for _, e := range entries {
			if err := fn(e); err != nil {
				return engine.Sweep{}, err
			}
		}
	}
	if err != nil {
		return engine.Sweep{}, fmt.Errorf("read the checkpoint: %w", err)
	}
	return sweep, nil
}

const maxNumber = 1<<32 - 1

// readEntries reads the next quantities, which are to be there from a number
// on, and the number at which to go on; beyond maxNumber at the end.
func readEntries(tx *bolt.Tx, from engine.QuantityNumber) (entries []engine.CheckpointEntry, next uint64, err error) {
	quantities, states := tx.Bucket(quantitiesBucket).Cursor(), tx.Bucket(statesBucket).Cursor()
	qk, qv := quantities.Seek(numberKey(from))
	sk, sv := states.Seek(numberKey(from))
	next = uint64(from)
	for len(entries) < checkpointSlice && (qk != nil || sk != nil) {
		key := qk
		if qk == nil || sk != nil && bytes.Compare(sk, qk) < 0 {
			key = sk
		}
		e := engine.CheckpointEntry{Number: engine.QuantityNumber(binary.BigEndian.Uint32(key))}
		hasQuantity, hasState := bytes.Equal(key, qk), bytes.Equal(key, sk)
		if err := checkEntry(engine.QuantityNumber(next), e.Number, hasQuantity, hasState); err != nil {
			return nil, 0, err
		}
		if hasQuantity {
			err = readQuantity(qk, qv, &e)
			qk, qv = quantities.Next()
		}
		if hasState && err == nil {
			err = readState(sk, sv, &e)
			sk, sv = states.Next()
		}
		if err != nil {
			return nil, 0, fmt.Errorf("%w: quantity %d: %w", ErrDamaged, e.Number, err)
		}
		entries = append(entries, e)
		next = uint64(e.Number) + 1
	}
	if qk == nil && sk == nil {
		next = maxNumber + 1
	}
	return entries, next, nil
}

// checkEntry tells what a checkpoint lacks at or before the entry of a number,
// where that of want comes next.
func checkEntry(want, number engine.QuantityNumber, hasQuantity, hasState bool) error {
	switch {
	case number != want:
		return fmt.Errorf("%w: the checkpoint of quantity %d is missing, that of %d follows", ErrDamaged, want, number)
	case !hasQuantity:
		return fmt.Errorf("%w: the checkpoint of quantity %d has a state but no declaration", ErrDamaged, number)
	case !hasState:
		return fmt.Errorf("%w: the checkpoint of quantity %d has a declaration but no state", ErrDamaged, number)
	}
	return nil
}

func readQuantity(key, value []byte, e *engine.CheckpointEntry) error {
	body, err := unseal(key, value)
	if err != nil {
		return err
	}
	e.Quantity = new(engine.Quantity)
	return decodeQuantity(body, e.Quantity)
}

func readState(key, value []byte, e *engine.CheckpointEntry) error {
	body, err := unseal(key, value)
	if err != nil {
		return err
	}
	if len(body) < 8 {
		return errors.New("its state is too short")
	}
	e.Through = engine.Position(binary.LittleEndian.Uint64(body))
	e.State = append([]byte{}, body[8:]...)
	return nil
}

const (
	// sliceBytes and sliceSeeks bound what one read transaction does.
	sliceBytes = 512 << 10
	sliceSeeks = 4_096
)

// Rows implements engine.Ledger.
func (l *Ledger) Rows(number engine.QuantityNumber, since engine.Instant, fn func([]engine.Row) error) error {
	h := l.acknowledged.Load()
	r := rowReader{number: number, since: since, last: h.segment, done: !h.swept}
	r.next = rowsKey(0, number, 0)
	for !r.done {
		if err := l.view(r.read); err != nil {
			return fmt.Errorf("read the rows of quantity %d: %w", number, err)
		}
		rows := r.rows
		for _, n := range r.chunks {
			if err := fn(rows[:n:n]); err != nil {
				return err
			}
			rows = rows[n:]
		}
	}
	return nil
}

// rowReader reads the rows of a quantity slice by slice.
type rowReader struct {
	number engine.QuantityNumber
	since  engine.Instant
	last   uint32 // segment
	next   []byte // key
	done   bool
	rows   []engine.Row
	chunks []int // lengths within rows
}

func (r *rowReader) read(tx *bolt.Tx) error {
	r.rows, r.chunks = r.rows[:0], r.chunks[:0]
	c := tx.Bucket(segmentsBucket).Cursor()
	key, value := c.Seek(r.next)
	for range sliceSeeks {
		if key == nil || len(key) != rowsKeyBytes || binary.BigEndian.Uint32(key) > r.last {
			r.done = true
			return nil
		}
		segment, number := binary.BigEndian.Uint32(key), engine.QuantityNumber(binary.BigEndian.Uint32(key[4:]))
		switch {
		case number < r.number:
			r.next = rowsKey(segment, r.number, 0)
			key, value = c.Seek(r.next)
			continue
		case number > r.number:
			if segment == r.last {
				r.done = true
				return nil
			}
			r.next = rowsKey(segment+1, r.number, 0)
			key, value = c.Seek(r.next)
			continue
		}
		if len(r.rows) >= sliceBytes/rowMemory {
			break
		}
		if err := r.take(key, value); err != nil {
			return err
		}
		key, value = c.Next()
	}
	if key != nil {
		r.next = bytes.Clone(key)
	}
	r.done = key == nil
	return nil
}

const rowMemory = 64 // bytes of an engine.Row

func (r *rowReader) take(key, value []byte) error {
	chunk, err := parseRows(key, value)
	if err == nil && chunk.latest >= r.since {
		before := len(r.rows)
		r.rows, err = chunk.appendTo(r.rows)
		r.chunks = append(r.chunks, len(r.rows)-before)
	}
	if err != nil {
		return fmt.Errorf("%w: rows of segment %d: %w", ErrDamaged, binary.BigEndian.Uint32(key), err)
	}
	return nil
}
