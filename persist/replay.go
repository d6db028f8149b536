package persist

import (
	"fmt"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// slab holds copies of chunks, to be decoded outside the transaction.
type slab struct {
	bytes  []byte
	chunks []copied
}

type copied struct {
	key        [8]byte
	begin, end int // in bytes
}

func (s *slab) reset() { s.bytes, s.chunks = s.bytes[:0], s.chunks[:0] }

func (s *slab) add(key, value []byte) error {
	if len(key) != 8 || len(value) > maxChunkBytes {
		return fmt.Errorf("a key of %d and a chunk of %d bytes", len(key), len(value))
	}
	c := copied{key: [8]byte(key), begin: len(s.bytes)}
	s.bytes = append(s.bytes, value...)
	c.end = len(s.bytes)
	s.chunks = append(s.chunks, c)
	return nil
}

func (s *slab) value(i int) []byte { return s.bytes[s.chunks[i].begin:s.chunks[i].end] }

// fill copies the chunks from the one that holds a position on, up to
// sliceBytes and not beyond the acknowledged end.
func (s *slab) fill(tx *bolt.Tx, from, last engine.Position) error {
	s.reset()
	end := string(positionKey(last))
	c := tx.Bucket(ledgerBucket).Cursor()
	for key, value := seekChunk(c, from); key != nil && string(key) <= end; key, value = c.Next() {
		if err := s.add(key, value); err != nil {
			return &Damage{from, err}
		}
		if len(s.bytes) >= sliceBytes {
			break
		}
	}
	if len(s.chunks) == 0 {
		return damaged(from, "no chunk holds it")
	}
	return nil
}

// Replay implements engine.Ledger. It verifies checksums and that no position
// is missing; Open has verified the hashes after the last sweep.
func (l *Ledger) Replay(from engine.Position, fn func(*engine.Record) error) error {
	from = max(from, 1)
	var s slab
	for last := l.acknowledged.Load().position; from <= last; {
		if err := l.view(func(tx *bolt.Tx) error { return s.fill(tx, from, last) }); err != nil {
			return fmt.Errorf("replay: %w", err)
		}
		next, err := s.replay(from, fn)
		if err != nil {
			return err
		}
		from = next
	}
	return nil
}

// replay decodes the records from a position on and returns the one to go on
// with.
func (s *slab) replay(from engine.Position, fn func(*engine.Record) error) (engine.Position, error) {
	var r engine.Record
	for i := range s.chunks {
		c, err := parseChunk(s.chunks[i].key[:], s.value(i))
		if err != nil {
			return 0, fmt.Errorf("replay: %w", &Damage{from, err})
		}
		if c.position > from || c.end() <= from {
			return 0, fmt.Errorf("replay: %w", damaged(from, "the next chunk has %d to %d", c.position, c.end()-1))
		}
		for d := c.decoder(); ; {
			more, err := d.next(&r)
			if err != nil {
				return 0, fmt.Errorf("replay: %w", &Damage{d.position, err})
			}
			if !more {
				break
			}
			if r.Position < from {
				continue
			}
			if err := fn(&r); err != nil {
				return 0, err
			}
		}
		from = c.end()
	}
	return from, nil
}

// Records implements engine.Ledger.
func (l *Ledger) Records(at []engine.Position, fn func(*engine.Record) error) error {
	last := l.acknowledged.Load().position
	var p picker
	for len(at) > 0 {
		if err := l.view(func(tx *bolt.Tx) error { return p.fill(tx, at, last) }); err != nil {
			return fmt.Errorf("read records: %w", err)
		}
		n := len(p.where)
		for i, position := range at[:n] {
			r, err := p.pick(i, position)
			if err != nil {
				return fmt.Errorf("read records: %w", err)
			}
			if err := fn(r); err != nil {
				return err
			}
		}
		at = at[n:]
	}
	return nil
}

// picker finds single records: it copies their chunks, each once where
// positions that follow each other share it.
type picker struct {
	slab
	where   []int // chunk of each position
	open    int   // chunk being decoded, from 1
	decoder decoder
	record  engine.Record
}

func (p *picker) fill(tx *bolt.Tx, at []engine.Position, last engine.Position) error {
	p.reset()
	p.where, p.open = p.where[:0], 0
	c := tx.Bucket(ledgerBucket).Cursor()
	for _, position := range at {
		if position == 0 || position > last {
			return fmt.Errorf("the ledger has no position %d; its last is %d", position, last)
		}
		key, value := seekChunk(c, position)
		if key == nil {
			return damaged(position, "no chunk holds it")
		}
		if n := len(p.chunks); n == 0 || string(p.chunks[n-1].key[:]) != string(key) {
			if err := p.add(key, value); err != nil {
				return &Damage{position, err}
			}
		}
		p.where = append(p.where, len(p.chunks)-1)
		if len(p.bytes) >= sliceBytes || len(p.where) == sliceSeeks {
			break
		}
	}
	return nil
}

// pick decodes the record of the ith position.
func (p *picker) pick(i int, position engine.Position) (*engine.Record, error) {
	at := p.where[i]
	if p.open != at+1 || p.decoder.position > position {
		c, err := parseChunk(p.chunks[at].key[:], p.value(at))
		if err != nil {
			return nil, &Damage{position, err}
		}
		p.decoder, p.open = c.decoder(), at+1
	}
	for p.decoder.position <= position {
		more, err := p.decoder.next(&p.record)
		if err != nil {
			return nil, &Damage{p.decoder.position, err}
		}
		if !more {
			return nil, damaged(position, "no chunk holds it")
		}
	}
	return &p.record, nil
}
