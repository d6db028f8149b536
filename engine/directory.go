package engine

import (
	"cmp"
	"slices"
	"sync"
)

// directory finds a track by its quantity's ID, also that of a declaration
// which isn't durable yet. The keeper's goroutine waits for readers only to
// add a quantity that is new.
type directory struct {
	mu           sync.RWMutex // guards all below
	byID         map[QuantityID]place
	byInstrument map[InstrumentID]*instrumentTrack
	instruments  []*instrumentTrack // by ID if sorted; changed by appending only
	sorted       bool
}

func newDirectory() *directory {
	return &directory{byID: map[QuantityID]place{}, byInstrument: map[InstrumentID]*instrumentTrack{}}
}

// place is a track with its number, which is at hand before the track is.
type place struct {
	track  *Track
	number QuantityNumber
}

func (d *directory) find(id QuantityID) *Track { return d.place(id).track }

func (d *directory) place(id QuantityID) place {
	d.mu.RLock()
	defer d.mu.RUnlock()
	return d.byID[id]
}

func (d *directory) add(t *Track) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.byID[t.id] = place{t, t.number}
}

func (d *directory) remove(id QuantityID) {
	d.mu.Lock()
	defer d.mu.Unlock()
	delete(d.byID, id)
}

func (d *directory) instrument(id InstrumentID) *instrumentTrack {
	d.mu.RLock()
	defer d.mu.RUnlock()
	return d.byInstrument[id]
}

// numberOf returns the number of an instrument, 0 for none.
func (d *directory) numberOf(id InstrumentID) InstrumentNumber {
	if id == "" {
		return 0
	}
	if t := d.instrument(id); t != nil {
		return t.number
	}
	return 0
}

// allInstruments returns every instrument, by the bytes of its ID.
func (d *directory) allInstruments() []*instrumentTrack {
	d.mu.Lock()
	defer d.mu.Unlock()
	if !d.sorted {
		d.instruments = slices.SortedFunc(slices.Values(d.instruments), func(a, b *instrumentTrack) int { return cmp.Compare(a.id, b.id) })
		d.sorted = true
	}
	return slices.Clip(d.instruments)
}

func (d *directory) addInstrument(t *instrumentTrack) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.byInstrument[t.id] = t
	d.instruments, d.sorted = append(d.instruments, t), false
}

func (d *directory) removeInstrument(t *instrumentTrack) {
	d.mu.Lock()
	defer d.mu.Unlock()
	delete(d.byInstrument, t.id)
	d.instruments = slices.DeleteFunc(slices.Clone(d.instruments), func(u *instrumentTrack) bool { return u == t })
}

// resolved is what a caller's goroutine finds out of a reading before the
// keeper decides on it: most of the time that takes is spent waiting for memory.
type resolved struct {
	place                       // no track: not known then
	instrument *instrumentTrack // filled in by the keeper; nil without one, or if it is not known
	hash       idHash           // of the ID, if there is a track and an ID
	// stored is the reading in the ledger with the same quantity, ID and time,
	// if it was looked for and found.
	stored *seenID
}

// resolve looks the readings' quantities up and hashes their IDs.
func (d *directory) resolve(readings []Reading, seeds *idSeeds) []resolved {
	all := make([]resolved, len(readings))
	d.mu.RLock()
	for i := range readings {
		all[i].place = d.byID[readings[i].Quantity]
	}
	d.mu.RUnlock()
	for i := range readings {
		all[i].hashID(&readings[i], seeds)
	}
	return all
}

// hashID fills in the hash.
func (f *resolved) hashID(r *Reading, seeds *idSeeds) {
	if f.track != nil && r.ID != "" {
		f.hash = seeds.hash(f.number, r.ID)
	}
}
