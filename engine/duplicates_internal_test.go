package engine

import (
	"fmt"
	"math/rand/v2"
	"testing"
)

// The window remembers at least the last capacity IDs, counts exactly those of
// the last day among them as recent, and knows what it has lost.
func TestWindowRemembersTheLast(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	seeds := newIDSeeds()
	for _, capacity := range []int{1, 7, 3000} {
		w := newWindow(capacity, 5)
		type added struct {
			hash    idHash
			receive Instant
		}
		all := []added{{}} // positions begin with 1
		receive := Instant(0)
		for i := 1; i <= 5*w.size; i++ {
			receive += Instant(rng.Int64N(3 * windowAge / int64(w.size)))
			h := seeds.hash(QuantityNumber(i%5), ReadingID(fmt.Sprint(i)))
			w.add(seenID{hash: h, receive: receive, position: Position(i)})
			all = append(all, added{h, receive})
			for range 5 {
				j := 1 + rng.IntN(len(all)-1)
				e, got := w.find(all[j].hash)
				if held := Position(j) > w.lost; (e != nil) != held || e != nil && e.position != Position(j) {
					t.Fatalf("capacity %d: ID %d of %d is held: %v, want %v", capacity, j, i, e != nil, held)
				}
				recent := i-j < capacity && receive-all[j].receive <= windowAge
				if got != recent {
					t.Fatalf("capacity %d: ID %d of %d is recent: %v, want %v", capacity, j, i, !recent, recent)
				}
			}
		}
		if w.lost == 0 {
			t.Errorf("capacity %d: nothing was lost", capacity)
		}
	}
}
