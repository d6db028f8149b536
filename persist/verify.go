package persist

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"os"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// maxReported bounds the lines of Verify about one kind of damage.
const maxReported = 1_000

// Verify examines a whole ledger that nobody has open for writing: the structure
// of pages, the checksum of every record, positions, commit times, the hash of
// every group, the checkpoint, and whether it lacks anything. It writes a line for each damage it finds
// and a summary to w; its error is the first damage, or why the file can't be
// examined.
func Verify(path string, w io.Writer) error {
	db, file, err := openFile(path, bolt.Options{ReadOnly: true}) // for its lock
	if err != nil {
		return fmt.Errorf("verify %s: %w", path, err)
	}
	defer db.Close()
	v := verifier{
		w: w, buckets: map[string]bool{}, chain: newChain(), head: &head{}, inventory: inventory{},
		instruments: map[engine.InstrumentNumber]engine.Position{}, listed: map[engine.InstrumentNumber]engine.Position{},
	}
	v.chain.each = v.record
	if err := v.run(file, db.Info().PageSize); err != nil {
		v.report(err)
	}
	if v.first != nil {
		return fmt.Errorf("verify %s: %w", path, v.first)
	}
	return nil
}

type verifier struct {
	w        io.Writer
	first    error
	reported int

	buckets map[string]bool
	format  uint32 // of the file; 0: its key is missing
	needed  uint32 // format that the records need
	swept   bool   // likewise
	head    *head
	chain   *chain
	lost    bool // until the next group begins
	damaged int  // groups

	quantities, states, rows int

	inventory   inventory
	instruments map[engine.InstrumentNumber]engine.Position // by the ledger
	listed      map[engine.InstrumentNumber]engine.Position // by their bucket
	scratch     []engine.Row
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

func (v *verifier) run(file *os.File, pageSize int) error {
	m, err := readMetas(file, pageSize)
	if err != nil {
		return err
	}
	checkPages(file, m, v.report, v.element)
	if v.format == 0 {
		return ErrForeign
	}
	for _, name := range buckets() {
		if !v.buckets[string(name)] {
			v.report(fmt.Errorf("%w: the bucket %s is missing", ErrDamaged, name))
		}
	}
	if err := v.chain.endAt(v.head); err != nil {
		v.report(err)
	}
	if !v.swept && v.head.swept {
		v.report(fmt.Errorf("%w: the sweep is missing", ErrDamaged))
	}
	if v.first == nil { // else it is known why something is missing
		if v.needed > v.format {
			v.report(fmt.Errorf("%w: its format is %d, but its records need %d", ErrDamaged, v.format, v.needed))
		}
		v.inventory.check(v.report)
		checkInstruments(v.instruments, v.listed, v.report)
		if int(v.head.instruments) != len(v.instruments) {
			v.report(fmt.Errorf("%w: the head names %d instruments, but %d have records", ErrDamaged, v.head.instruments, len(v.instruments)))
		}
	}
	if v.reported > maxReported {
		fmt.Fprintf(v.w, "and %d more\n", v.reported-maxReported)
	}
	fmt.Fprintf(v.w, "records %d, groups %d, damaged groups %d, quantities %d, states %d, rows %d\n",
		v.chain.next-1, v.chain.groups, v.damaged, v.quantities, v.states, v.rows)
	if v.reported > 0 { // the stored hash may well be that of the ledger before the damage
		_, err = fmt.Fprintln(v.w, "no hash, as the file is damaged")
		return err
	}
	_, err = fmt.Fprintf(v.w, "hash %x\n", v.chain.hash)
	return err
}

// element examines one key, or the name of a bucket. Buckets come in the order of their names, so what
// refers to the ledger comes after it, except for the head.
func (v *verifier) element(bucket string, key, value []byte) {
	if key == nil {
		v.buckets[bucket] = true
		return
	}
	if err := v.value(bucket, key, value); err != nil {
		v.report(fmt.Errorf("%w: %s, key %x: %w", ErrDamaged, bucket, key, err))
	}
}

var errKey = errors.New("it is no key of this version")

func (v *verifier) value(bucket string, key, value []byte) (err error) {
	switch bucket {
	case string(headBucket):
		if string(key) != string(headKey) {
			return errKey
		}
		v.head, err = parseHead(value)
	case string(instrumentsBucket):
		n, at, err := parseInstrumentKey(key, value)
		v.listed[n] = at
		return err
	case string(ledgerBucket):
		v.ledger(key, value)
	case string(metaBucket):
		return v.metaKey(key, value)
	case string(quantitiesBucket):
		return v.quantity(key, value)
	case string(segmentsBucket):
		return v.segment(key, value)
	case string(statesBucket):
		return v.state(key, value)
	}
	return err
}

// ledger examines a chunk. After damage it goes on with the next group, whose
// hash it can verify if the damaged one's is known.
func (v *verifier) ledger(key, value []byte) {
	chunk, err := parseChunk(key, value)
	begins := err == nil && chunk.first
	if v.lost && !begins {
		return
	}
	if v.lost {
		v.chain.resume(&chunk)
	}
	v.lost = !v.add(key, value)
	if v.lost && begins && !(v.chain.within && v.chain.first == chunk.position) {
		// The damage is before this group.
		v.chain.resume(&chunk)
		v.lost = !v.add(key, value)
	}
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

func positionOf(key []byte) engine.Position {
	if len(key) != 8 {
		return 0
	}
	return engine.Position(binary.BigEndian.Uint64(key))
}

func (v *verifier) metaKey(key, value []byte) error {
	if string(key) == string(formatKey) {
		v.format = formatFirst // at least
		err := checkFormatValue(value)
		if err == nil {
			v.format = formatOf(value)
		}
		return err
	}
	if _, err := unseal(key, value); err != nil || string(key) != string(sweepKey) {
		return err
	}
	s, err := parseSweep(value)
	if err != nil {
		return err
	}
	v.swept = true
	return v.head.agrees(s, true)
}

// includes checks that the ledger has come to a position.
func (v *verifier) includes(p engine.Position) error {
	if p >= v.chain.next {
		return fmt.Errorf("it includes position %d, but the ledger ends at %d", p, v.chain.next-1)
	}
	return nil
}

func (v *verifier) quantity(key, value []byte) error {
	v.quantities++
	if len(key) != numberKeyBytes {
		return errKey
	}
	v.inventory.of(numberOf(key)).quantity = true
	return readQuantity(key, value, new(engine.CheckpointEntry))
}

func (v *verifier) state(key, value []byte) error {
	v.states++
	if len(key) != numberKeyBytes {
		return errKey
	}
	v.inventory.of(numberOf(key)).state = true
	var e engine.CheckpointEntry
	if err := readState(key, value, &e); err != nil {
		return err
	}
	return v.includes(e.Through)
}

func (v *verifier) segment(key, value []byte) error {
	if len(key) != rowsKeyBytes {
		return errKey
	}
	chunk, err := parseRows(key, value)
	if err != nil {
		return err
	}
	v.rows += chunk.count
	v.scratch, err = chunk.appendTo(v.scratch[:0])
	if err != nil || !v.head.complete(binary.BigEndian.Uint32(key)) {
		return err // rows of an interrupted sweep aren't read by anybody
	}
	s := v.inventory.of(numberOf(key[4:]))
	for i := range v.scratch {
		s.rows.add(&v.scratch[i])
	}
	return nil
}

// record notes what the checkpoint is to hold of a record.
func (v *verifier) record(r *engine.Record) {
	noteLatest(v.instruments, r)
	v.needed = max(v.needed, needs(r))
	if !v.head.swept || r.Position > v.head.through || r.Kind == engine.KindRefusal || r.Kind == engine.KindInstrument {
		return
	}
	s := v.inventory.of(r.Number)
	s.recorded = true
	if r.Kind == engine.KindReading {
		s.readings.add(&engine.Row{
			Time: r.Reading.Time, Value: r.Reading.Value, Position: r.Position,
			Extent: r.Reading.Extent, Upper: r.Reading.Upper, Samples: r.Reading.Samples,
			HasUncertainty: r.Reading.HasUncertainty, Uncertainty: r.Reading.RandomStandardUncertainty,
			HasID: r.Reading.ID != "",
		})
	}
}
