package published_test

import (
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"strconv"
	"sync"
	"testing"
	"time"

	"google.golang.org/protobuf/encoding/protojson"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// temperatures are 114 body temperatures, nearly all ten minutes apart
// (Reynolds 1994, R datasets::beaver1).
func temperatures(t testing.TB, id string) ([]posted, []time.Time) {
	beaver := readTable(t, "beaver1.csv")
	days, clocks, values := beaver.column("day"), beaver.column("time"), beaver.column("temp")
	var times []time.Time
	for i := range values {
		hour, minute := int(clocks[i])/100, int(clocks[i])%100
		times = append(times, time.Date(1990, 1, int(days[i]), hour, minute, 0, 0, time.UTC))
	}
	return timedReadings(id, values, times), times
}

// tally counts what became of readings.
type tally struct{ applied, duplicate, refused int }

func (a *tally) add(applied, duplicate, refused uint32) {
	a.applied += int(applied)
	a.duplicate += int(duplicate)
	a.refused += int(refused)
}

// gateway sends its share of the traffic by whatever way comes to its mind. It
// runs beside the test and so returns errors.
type gateway struct {
	s      *service
	rng    *rand.Rand
	counts tally
}

// send delivers batches, some of them again as if the answer had been lost.
func (g *gateway) send(readings []posted) error {
	for len(readings) > 0 {
		n := min(1+g.rng.IntN(25), len(readings))
		batch := readings[:n]
		readings = readings[n:]
		for range 1 + g.rng.IntN(2) {
			if err := g.deliver(batch); err != nil {
				return err
			}
		}
	}
	return nil
}

func (g *gateway) deliver(batch []posted) error {
	switch g.rng.IntN(5) {
	case 0:
		return g.oneByOne(batch)
	case 1:
		response, err := g.s.readings.PostReadings(g.s.t.Context(), &leadlinev1.PostReadingsRequest{Readings: messages(batch)})
		if err != nil {
			return err
		}
		g.counts.add(response.GetAppliedCount(), response.GetDuplicateCount(), response.GetRefusedCount())
		return nil
	case 2, 3:
		return g.stream(batch)
	}
	response := g.s.postHTTP(batch)
	g.counts.add(response.GetAppliedCount(), response.GetDuplicateCount(), response.GetRefusedCount())
	return nil
}

func (g *gateway) oneByOne(batch []posted) error {
	for i, r := range batch {
		var result *leadlinev1.ReadingResult
		if i%2 == 0 {
			body := fmt.Sprintf(`{"value":%s,"time":%q,"reading_id":%q}`, number(r.Value), r.Time, r.ID)
			a := g.s.call("POST", quantityPath(r.Quantity)+"/readings", body)
			response := new(leadlinev1.PostReadingResponse)
			if err := protojson.Unmarshal([]byte(a.body), response); err != nil {
				return fmt.Errorf("%w in %s", err, a.body)
			}
			result = response.GetResult()
		} else {
			response, err := g.s.readings.PostReading(g.s.t.Context(), &leadlinev1.PostReadingRequest{Quantity: r.Quantity, Reading: r.message()})
			if err != nil {
				return err
			}
			result = response.GetResult()
		}
		switch result.GetStatus() {
		case leadlinev1.Reading_APPLIED:
			g.counts.applied++
		case leadlinev1.Reading_DUPLICATE:
			g.counts.duplicate++
		default:
			g.counts.refused++
		}
	}
	return nil
}

// stream sends a batch in messages of one to five readings without waiting for
// their acknowledgements, which have to come in order.
func (g *gateway) stream(batch []posted) error {
	stream, err := g.s.readings.StreamReadings(g.s.t.Context())
	if err != nil {
		return err
	}
	var sizes []int
	for len(batch) > 0 {
		n := min(1+g.rng.IntN(5), len(batch))
		sizes = append(sizes, n)
		if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: uint64(len(sizes)), Readings: messages(batch[:n])}); err != nil {
			return err
		}
		batch = batch[n:]
	}
	if err := stream.CloseSend(); err != nil {
		return err
	}
	for i, n := range sizes {
		got, err := stream.Recv()
		if err != nil {
			return err
		}
		if got.GetSequence() != uint64(i+1) || len(got.GetResults()) != n {
			return fmt.Errorf("acknowledgement %d with %d results, want %d with %d", got.GetSequence(), len(got.GetResults()), i+1, n)
		}
		g.counts.add(got.GetAppliedCount(), got.GetDuplicateCount(), got.GetRefusedCount())
	}
	if _, err := stream.Recv(); !errors.Is(err, io.EOF) {
		return fmt.Errorf("after the last acknowledgement: %w", err)
	}
	return nil
}

// deliverInDisorder has four gateways send every reading one to three times in
// a random order, and returns how many were sent and what became of them.
func (s *service) deliverInDisorder(rng *rand.Rand, readings []posted) (sent int, counts tally) {
	var all []posted
	for _, r := range readings {
		for range 1 + rng.IntN(3) {
			all = append(all, r)
		}
	}
	rng.Shuffle(len(all), func(i, j int) { all[i], all[j] = all[j], all[i] })
	const gateways = 4
	var running sync.WaitGroup
	var each [gateways]gateway
	var errs [gateways]error
	for i := range each {
		each[i] = gateway{s: s, rng: newRand(rng.Uint64())}
		share := all[i*len(all)/gateways : (i+1)*len(all)/gateways]
		running.Go(func() { errs[i] = each[i].send(share) })
	}
	running.Wait()
	if err := errors.Join(errs[:]...); err != nil {
		s.t.Fatal(err)
	}
	for i := range each {
		c := each[i].counts
		counts.applied += c.applied
		counts.duplicate += c.duplicate
		counts.refused += c.refused
	}
	return counts.applied + counts.duplicate + counts.refused, counts
}

// sameBelief compares as invariant 3 of the design asks.
func sameBelief(got, want *leadlinev1.Belief) error {
	mean, deviation := want.GetMean(), want.GetStandardDeviation()
	ulp := math.Nextafter(math.Abs(mean), math.Inf(1)) - math.Abs(mean)
	switch {
	case got.GetReadingCount() != want.GetReadingCount():
		return fmt.Errorf("%d readings, want %d", got.GetReadingCount(), want.GetReadingCount())
	case !(math.Abs(got.GetMean()-mean) <= 1e-9*deviation+2*ulp):
		return fmt.Errorf("mean %v, want %v", got.GetMean(), mean)
	case !near(got.GetStandardDeviation(), deviation, 1e-9):
		return fmt.Errorf("standard deviation %v, want %v", got.GetStandardDeviation(), deviation)
	case (got.Mean == nil) != (want.Mean == nil) || (got.StandardDeviation == nil) != (want.StandardDeviation == nil):
		return fmt.Errorf("%v, want %v", got, want)
	}
	return nil
}

// Late, repeated and shuffled traffic over every way in, from several gateways
// at once, leads to the belief of tidy traffic, at every instant, and each
// reading counts once.
func TestUntidyTrafficGivesTheTidyBelief(t *testing.T) {
	declarations := map[string]string{
		"constant": `{"unit":"°C","prior":{"mean":37,"standard_deviation":1},"repeatability":{"standard_deviation":0.05}}`,
		"vague":    `{"unit":"°C","repeatability":{"standard_deviation":0.05}}`,
		"learned":  `{"unit":"°C","repeatability":{"learned":{}}}`,
		"mixture":  `{"unit":"°C","prior":{"mean":37,"standard_deviation":0.2},"repeatability":{"learned":{"guess":0.1,"worth":4}}}`,
		"walk": `{"unit":"°C","repeatability":{"standard_deviation":0.05},
			"dynamics":{"random_walk":{"standard_deviation":0.1,"per":"3600s"}}}`,
		"walk-from-prior": `{"unit":"°C","prior":{"mean":36.5,"standard_deviation":0.5,"time":"1990-12-12T00:00:00Z"},
			"repeatability":{"standard_deviation":0.05},"dynamics":{"random_walk":{"standard_deviation":0.1,"per":"3600s"}}}`,
	}
	for _, seed := range seeds(2) {
		t.Run("seed="+strconv.FormatUint(seed, 10), func(t *testing.T) {
			s := start(t)
			var untidy []posted
			for name, declaration := range declarations {
				s.declare(name+"/tidy", declaration)
				s.declare(name+"/untidy", declaration)
				tidy, _ := temperatures(t, name+"/tidy")
				s.postAll(tidy)
				more, _ := temperatures(t, name+"/untidy")
				untidy = append(untidy, more...)
			}
			sent, counts := s.deliverInDisorder(newRand(seed), untidy)
			if want := (tally{applied: len(untidy), duplicate: sent - len(untidy)}); counts != want {
				t.Errorf("of %d readings sent %+v, want %+v", sent, counts, want)
			}
			s.compareTidy(declarations)
			s = s.restart()
			s.compareTidy(declarations)
			again, counts := s.deliverInDisorder(newRand(seed+1000), untidy)
			if want := (tally{duplicate: again}); counts != want {
				t.Errorf("sent again after a restart: %+v, want %+v", counts, want)
			}
		})
	}
}

func (s *service) compareTidy(declarations map[string]string) {
	s.t.Helper()
	_, times := temperatures(s.t, "")
	moments := []time.Time{{}, times[0].Add(-time.Hour), times[0], times[1]}
	for i := 5; i < len(times); i += 27 {
		moments = append(moments, times[i], times[i].Add(3*time.Minute))
	}
	for name := range declarations {
		for _, at := range moments {
			got, want := s.belief(name+"/untidy", at), s.belief(name+"/tidy", at)
			if err := sameBelief(got, want); err != nil {
				s.t.Errorf("%s at %v: %v", name, at, err)
			}
		}
		if n := s.belief(name+"/untidy", time.Time{}).GetReadingCount(); int(n) != len(times) {
			s.t.Errorf("%s has %d readings, want %d", name, n, len(times))
		}
	}
}
