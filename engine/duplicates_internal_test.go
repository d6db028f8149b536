package engine

import (
	"fmt"
	"math/rand/v2"
	"testing"
)

// The window remembers exactly the last capacity IDs of the last day.
func TestWindowRemembersTheLast(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	seeds := newIDSeeds()
	for _, capacity := range []int{1, 7, 3000} {
		w := newWindow(capacity)
		type added struct {
			hash    idHash
			receive Instant
		}
		var all []added
		receive := Instant(0)
		for i := range 5 * capacity {
			receive += Instant(rng.Int64N(3 * windowAge / int64(capacity+1)))
			h := seeds.hash(QuantityNumber(i%5), ReadingID(fmt.Sprint(i)))
			w.add(seenID{hash: h, receive: receive, position: Position(i)})
			all = append(all, added{h, receive})
			for range 5 {
				j := rng.IntN(len(all))
				want := len(all)-j <= capacity && receive-all[j].receive <= windowAge
				if e := w.find(all[j].hash); (e != nil) != want || e != nil && e.position != Position(j) {
					t.Fatalf("capacity %d: ID %d of %d is found: %v, want %v", capacity, j, len(all), e != nil, want)
				}
			}
		}
		if !w.evicted {
			t.Errorf("capacity %d: nothing was evicted", capacity)
		}
	}
}
