package engine

import "hash/maphash"

// window remembers the IDs of the readings applied lately, so that a retry is
// known for what it is. It holds a 128-bit hash of (quantity, reading ID) in
// place of the text; the seeds are drawn anew by each process, so nobody can
// aim for a collision, and by chance two among a million IDs collide with a
// probability of 1e-27.
//
// A map would spend most of its time waiting for memory, and again for each ID
// that it forgets. Here an ID that is new, the usual case, costs one line of a
// table, and nothing is ever deleted: the IDs lie in two generations, in the
// order in which they came, and when the newer one is full the older one is
// emptied as a whole. Whatever a generation holds serves to know an exact
// repeat; an ID with another time counts only while the ID is among the last
// capacity and not older than windowAge.
type window struct {
	capacity int
	size     int    // of a generation
	added    uint64 // IDs so far
	newest   Instant
	lost     Position // no reading up to this is remembered, all later ones with an ID are
	current  generation
	previous generation
}

// generation is a hash table with linear probing over entries in the order of
// their arrival. A slot is 0 or holds 32 bits of the hash and an index + 1.
type generation struct {
	slots   []uint64
	entries entries
	first   uint64 // IDs that came before the first entry
}

// entries is a list in chunks, so that no growth copies what is there.
type entries struct {
	chunks [][]seenID // each of chunkEntries
	count  int
}

const chunkEntries = 1 << 12

func (l *entries) at(i int) *seenID { return &l.chunks[i/chunkEntries][i%chunkEntries] }

// add appends e; the chunks of a list that was emptied are used again.
func (l *entries) add(e seenID) {
	if l.count == len(l.chunks)*chunkEntries {
		l.chunks = append(l.chunks, make([]seenID, chunkEntries))
	}
	l.count++
	*l.at(l.count - 1) = e
}

type idHash [2]uint64

// seenID is the reading that an ID stands for.
type seenID struct {
	hash     idHash
	time     Instant
	said     said
	position Position
	receive  Instant
	untimed  bool // its time was given by the service
}

// windowAge is how long an ID counts for readings with another time, in
// nanoseconds.
const windowAge = 24 * 3600 * 1_000_000_000

// minGeneration is more than all readings that are decided on but not yet
// durable: those are found nowhere but in the window.
const minGeneration = 3 * maxGroupRecords

func newWindow(capacity, least int) *window {
	return &window{
		capacity: capacity, size: max(capacity, least),
		current: newGeneration(), previous: newGeneration(),
	}
}

func newGeneration() generation { return generation{slots: make([]uint64, 1<<10)} }

// idSeeds are the seeds of the hashes; any goroutine may use them.
type idSeeds [2]maphash.Seed

func newIDSeeds() idSeeds { return idSeeds{maphash.MakeSeed(), maphash.MakeSeed()} }

// hash returns the hash of a reading ID of a quantity. Mixing the number in by
// a product with an odd constant is one to one, so it keeps quantities apart.
func (s *idSeeds) hash(number QuantityNumber, id ReadingID) idHash {
	return idHash{
		maphash.String(s[0], string(id)) + uint64(number)*0x9e3779b97f4a7c15,
		maphash.String(s[1], string(id)) ^ uint64(number)*0xbf58476d1ce4e5b9,
	}
}

// find returns the reading that h stands for, nil if it isn't remembered, and
// whether it counts for readings with another time.
func (w *window) find(h idHash) (e *seenID, recent bool) {
	g := &w.current
	i := g.find(h)
	if i < 0 {
		g = &w.previous
		i = g.find(h)
	}
	if i < 0 {
		return nil, false
	}
	e = g.entries.at(i)
	age := w.added - g.first - uint64(i)
	return e, age <= uint64(w.capacity) && w.newest.Sub(e.receive) <= windowAge
}

// complete tells whether the window holds every ID and still will after n more.
func (w *window) complete(n int) bool {
	room := w.size - w.current.entries.count
	if w.previous.entries.count == 0 {
		room += w.size
	}
	return w.lost == 0 && n <= room
}

// oldest returns the position of the first of the last capacity IDs; 0 if there
// is none.
func (w *window) oldest() Position {
	skip := max(0, w.previous.entries.count+w.current.entries.count-w.capacity)
	for _, g := range []*generation{&w.previous, &w.current} {
		if skip < g.entries.count {
			return g.entries.at(skip).position
		}
		skip -= g.entries.count
	}
	return 0
}

// add remembers an ID, also one that stood for another reading before.
func (w *window) add(e seenID) {
	if w.current.entries.count == w.size {
		if n := w.previous.entries.count; n > 0 {
			w.lost = w.previous.entries.at(n - 1).position
		}
		w.current, w.previous = w.previous, w.current
		clear(w.current.slots)
		w.current.entries.count = 0
		w.current.first = w.added
	}
	w.added++
	e.receive = max(e.receive, w.newest) // the clock may step back
	w.newest = e.receive
	w.current.add(e)
}

// find returns the index of the entry of h, -1 if there is none.
func (g *generation) find(h idHash) int {
	mask := uint64(len(g.slots) - 1)
	for i := h[0] & mask; g.slots[i] != 0; i = (i + 1) & mask {
		if slot := g.slots[i]; slot>>32 == h[1]>>32 {
			if n := int(uint32(slot)) - 1; g.entries.at(n).hash == h {
				return n
			}
		}
	}
	return -1
}

func (g *generation) add(e seenID) {
	g.entries.add(e)
	g.place(g.entries.count)
	if 2*g.entries.count > len(g.slots) {
		g.slots = make([]uint64, 2*len(g.slots))
		for i := range g.entries.count {
			g.place(i + 1)
		}
	}
}

// place puts the entry before index n into the table; the later reading takes
// the place of an earlier one with its ID.
func (g *generation) place(n int) {
	h := g.entries.at(n - 1).hash
	slot := h[1]&^0xffffffff | uint64(n)
	mask := uint64(len(g.slots) - 1)
	i := h[0] & mask
	for ; g.slots[i] != 0; i = (i + 1) & mask {
		if old := g.slots[i]; old>>32 == slot>>32 && g.entries.at(int(uint32(old))-1).hash == h {
			break
		}
	}
	g.slots[i] = slot
}
