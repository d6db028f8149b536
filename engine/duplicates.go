package engine

import "hash/maphash"

// window remembers the IDs of the readings applied lately, so that a retry is
// known for what it is. It holds a 128-bit hash of (quantity, reading ID) in
// place of the text; the seeds are drawn anew by each process, so nobody can
// aim for a collision, and by chance two among a million IDs collide with a
// probability of 1e-27.
type window struct {
	seen    map[idHash]seenID
	order   []windowEntry // ring, oldest at start
	start   int
	used    int
	evicted bool // something applied is no longer in seen
	seeds   [2]maphash.Seed
}

type idHash [2]uint64

// seenID is the reading that an ID stands for.
type seenID struct {
	time     Instant
	value    float64
	position Position
	untimed  bool // its time was given by the service
}

type windowEntry struct {
	hash    idHash
	time    Instant
	receive Instant
}

// windowAge is how long an ID is remembered at least, if there is room.
const windowAge = 24 * 3600 * 1_000_000_000

func newWindow(capacity int) *window {
	return &window{
		seen:  make(map[idHash]seenID),
		order: make([]windowEntry, capacity),
		seeds: [2]maphash.Seed{maphash.MakeSeed(), maphash.MakeSeed()},
	}
}

func (w *window) hash(number QuantityNumber, id ReadingID) idHash {
	h := idHash{maphash.String(w.seeds[0], string(id)), maphash.String(w.seeds[1], string(id))}
	// Splitting the number over both words keeps pairs apart: the multiplier is
	// odd, so the map from number to offset is one to one.
	h[0] += uint64(number) * 0x9e3779b97f4a7c15
	h[1] ^= uint64(number) * 0xbf58476d1ce4e5b9
	return h
}

func (w *window) find(h idHash) (seenID, bool) {
	s, ok := w.seen[h]
	return s, ok
}

// add remembers h, forgetting the oldest if there is no room and what is older
// than windowAge before receive.
func (w *window) add(h idHash, s seenID, receive Instant) {
	for w.used > 0 && (w.used == len(w.order) || receive.Sub(w.order[w.start].receive) > windowAge) {
		w.forgetOldest()
	}
	w.order[(w.start+w.used)%len(w.order)] = windowEntry{hash: h, time: s.time, receive: receive}
	w.used++
	w.seen[h] = s
}

func (w *window) forgetOldest() {
	e := w.order[w.start]
	w.start = (w.start + 1) % len(w.order)
	w.used--
	w.evicted = true
	// The ID may have been used again since, with another time.
	if s, ok := w.seen[e.hash]; ok && s.time == e.time {
		delete(w.seen, e.hash)
	}
}
