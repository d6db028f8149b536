package persist

import (
	"bytes"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"hash"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// Damage is a place where the ledger isn't what was written. It is ErrDamaged.
type Damage struct {
	Position engine.Position // of the first record that isn't sound
	What     error
}

// Error names the position.
func (d *Damage) Error() string {
	return fmt.Sprintf("%v; at position %d: %v", ErrDamaged, d.Position, d.What)
}

// Unwrap returns what was found there.
func (d *Damage) Unwrap() error { return d.What }

// Is tells that any Damage is ErrDamaged.
func (d *Damage) Is(target error) bool { return target == ErrDamaged }

func damaged(at engine.Position, format string, args ...any) *Damage {
	return &Damage{Position: at, What: fmt.Errorf(format, args...)}
}

// chain verifies chunks one after another: checksums, positions without a gap,
// commit times that never decrease, and the hash of each group.
type chain struct {
	next   engine.Position // of the record to come
	commit engine.Instant  // of the group before, or under way
	hash   [sha256.Size]byte
	loose  bool // hash is unknown, as the group before can't be read

	within  bool // a group
	first   engine.Position
	chunks  int // still to come
	records int // likewise
	want    [sha256.Size]byte
	sum     hash.Hash
	groups  int // complete ones

	record engine.Record
	each   func(*engine.Record) // is given the records, if not nil
}

func newChain() *chain { return &chain{next: 1, sum: sha256.New()} }

// add verifies the next chunk.
func (c *chain) add(key, value []byte) error {
	chunk, err := parseChunk(key, value)
	if err != nil {
		return &Damage{c.next, err}
	}
	if chunk.position != c.next {
		return damaged(c.next, "the next chunk begins at %d", chunk.position)
	}
	if err := c.enter(&chunk); err != nil {
		return err
	}
	c.sum.Write(key)
	c.sum.Write(chunk.fixed)
	c.sum.Write(chunk.body)
	d := chunk.decoder()
	for {
		more, err := d.next(&c.record)
		if err != nil {
			return &Damage{d.position, err}
		}
		if !more {
			break
		}
		if c.each != nil {
			c.each(&c.record)
		}
	}
	c.next = chunk.end()
	c.chunks--
	c.records -= chunk.records
	if c.chunks == 0 {
		return c.leave()
	}
	return nil
}

// enter begins the chunk's group or goes on with it.
func (c *chain) enter(chunk *chunk) error {
	switch {
	case chunk.first && c.within:
		return damaged(c.next, "the group of position %d is cut short", c.first)
	case chunk.first && chunk.commit < c.commit:
		return damaged(c.next, "the commit time %v is before %v", chunk.commit, c.commit)
	case chunk.first:
		c.within, c.first, c.commit = true, chunk.position, chunk.commit
		c.chunks, c.records, c.want = chunk.groupChunks, chunk.groupRecords, chunk.hash
		c.sum.Reset()
		c.sum.Write(c.hash[:])
	case !c.within:
		return damaged(c.next, "the chunk belongs to no group")
	case chunk.commit != c.commit:
		return damaged(c.next, "the commit time differs within a group")
	}
	return nil
}

// leave verifies the hash of a complete group.
func (c *chain) leave() error {
	var sum [sha256.Size]byte
	c.sum.Sum(sum[:0])
	c.within, c.hash = false, c.want
	if c.records != 0 {
		return damaged(c.first, "the group has %d records too few", c.records)
	}
	if sum != c.want && !c.loose {
		return damaged(c.first, "the hash of the group to position %d doesn't match", c.next-1)
	}
	c.loose = false
	c.groups++
	return nil
}

// end reports a group that lacks its last chunks.
func (c *chain) end() error {
	if c.within {
		return damaged(c.next, "the group of position %d is cut short", c.first)
	}
	return nil
}

// resume goes on at the group that begins with chunk, after damage. Its hash
// can be verified only if that of the group before it is known.
func (c *chain) resume(chunk *chunk) {
	known := c.within && c.next+engine.Position(c.records) == chunk.position
	if known {
		c.hash = c.want
	}
	c.loose = !known && chunk.position != 1
	c.within = false
	c.next, c.commit = chunk.position, min(c.commit, chunk.commit)
}

// position returns the key of a position.
func positionKey(p engine.Position) []byte {
	return binary.BigEndian.AppendUint64(nil, uint64(p))
}

// seekChunk moves to the chunk that holds a position, nil if all are later.
func seekChunk(c *bolt.Cursor, at engine.Position) (key, value []byte) {
	want := positionKey(at)
	key, value = c.Seek(want)
	if key == nil {
		return c.Last()
	}
	if bytes.Equal(key, want) {
		return key, value
	}
	return c.Prev()
}

// seekGroup moves to the first chunk of the group that holds a position.
func seekGroup(c *bolt.Cursor, at engine.Position) (chunk chunk, err error) {
	key, value := seekChunk(c, at)
	for key != nil {
		if chunk, err = parseChunk(key, value); err != nil {
			return chunk, &Damage{at, err}
		}
		if chunk.first {
			return chunk, nil
		}
		key, value = c.Prev()
	}
	return chunk, damaged(at, "the group's first chunk is missing")
}

// verifyTail verifies the groups after the last sweep, at least the last one,
// and returns where the ledger ends.
func verifyTail(tx *bolt.Tx) (*head, error) {
	sweep, swept, err := readSweep(tx)
	if err != nil {
		return nil, err
	}
	h, err := readHead(tx)
	if err != nil {
		return nil, err
	}
	if err := h.agrees(sweep, swept); err != nil {
		return nil, err
	}
	cursor := tx.Bucket(ledgerBucket).Cursor()
	c := newChain()
	if h.position > 0 {
		if c, err = chainAt(cursor, min(h.through+1, h.position)); err != nil {
			return nil, err
		}
	}
	for key, value := cursor.Seek(positionKey(c.next)); key != nil; key, value = cursor.Next() {
		if err := c.add(key, value); err != nil {
			return nil, err
		}
	}
	return h, c.endAt(h)
}

// endAt checks that the chain has come to where the ledger ends.
func (c *chain) endAt(h *head) error {
	if err := c.end(); err != nil {
		return err
	}
	if c.next != h.position+1 || c.hash != h.hash || h.position > 0 && c.commit != h.commit {
		return damaged(c.next, "the ledger is to end with position %d and hash %x", h.position, h.hash)
	}
	return nil
}

// append encodes what parseHead reads.
func (h *head) append(b []byte) []byte {
	b = binary.LittleEndian.AppendUint64(append(b, formatVersion), uint64(h.position))
	b = binary.LittleEndian.AppendUint64(b, uint64(h.commit))
	b = append(b, h.hash[:]...)
	swept := byte(0)
	if h.swept {
		swept = 1
	}
	b = binary.LittleEndian.AppendUint32(append(b, swept), h.segment)
	b = binary.LittleEndian.AppendUint64(b, uint64(h.through))
	if h.instruments > 0 { // so that a head without is that of format version 1
		b = binary.LittleEndian.AppendUint32(b, uint32(h.instruments))
	}
	return seal(b, headKey, 0)
}

// readHead reads where the ledger ends; without it a loss at the end would be
// a shorter ledger that is sound. Its bucket is small enough to lie within the
// root page, which every commit writes anyway.
func readHead(tx *bolt.Tx) (*head, error) {
	value := tx.Bucket(headBucket).Get(headKey)
	if value == nil {
		return &head{}, nil
	}
	h, err := parseHead(value)
	if err != nil {
		return nil, fmt.Errorf("%w: the head: %w", ErrDamaged, err)
	}
	return h, nil
}

func parseHead(value []byte) (*head, error) {
	const hash, sweep = 16, 16 + sha256.Size
	body, err := unseal(headKey, value)
	if err == nil && len(body) < sweep+1+4+8 {
		err = errors.New("it is too short")
	}
	if err != nil {
		return &head{}, err
	}
	h := &head{
		position: engine.Position(binary.LittleEndian.Uint64(body)),
		commit:   engine.Instant(binary.LittleEndian.Uint64(body[8:])),
		hash:     [sha256.Size]byte(body[hash:sweep]),
		swept:    body[sweep] != 0,
		segment:  binary.LittleEndian.Uint32(body[sweep+1:]),
		through:  engine.Position(binary.LittleEndian.Uint64(body[sweep+5:])),
	}
	if rest := body[sweep+1+4+8:]; len(rest) >= 4 {
		h.instruments = engine.InstrumentNumber(binary.LittleEndian.Uint32(rest))
	}
	return h, nil
}

// agrees checks that the sweep stored is the one that the head names.
func (h *head) agrees(s engine.Sweep, swept bool) error {
	if swept != h.swept || s.Segment != h.segment || s.Through != h.through || h.through > h.position {
		return fmt.Errorf("%w: the sweep to position %d, of segment %d, isn't the last one of this ledger", ErrDamaged, s.Through, s.Segment)
	}
	return nil
}

// chainAt returns a chain that is to go on with the group of a position.
func chainAt(cursor *bolt.Cursor, at engine.Position) (*chain, error) {
	c := newChain()
	group, err := seekGroup(cursor, at)
	if err != nil {
		return nil, err
	}
	if c.next = group.position; c.next == 1 {
		c.commit = group.commit
		return c, nil
	}
	before, err := seekGroup(cursor, c.next-1)
	if err != nil {
		return nil, err
	}
	if before.position+engine.Position(before.groupRecords) != c.next {
		return nil, damaged(c.next, "the group of position %d doesn't end before it", before.position)
	}
	c.commit, c.hash = before.commit, before.hash
	return c, nil
}
