//go:build services

package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io/fs"
	"maps"
	"math/rand/v2"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/persist"
)

var cutCount = flag.Int("cuts", 500, "how many power losses TestPowerLoss tries")

// TestPowerLossLosesNothing records every write, sync and answer of real
// processes, and then, for many moments, what a power loss at that moment may
// leave of the files. Every such image must open, hold every reading whose
// answer had begun to leave, and nothing that was never sent.
func TestPowerLossLosesNothing(t *testing.T) {
	random := newRandom(t)
	r := recordRun(t, random, buildCommand(t))
	losses, tried := r.cutPower(t, random, *cutCount)
	for _, err := range losses[:min(5, len(losses))] {
		t.Error(err)
	}
	if len(losses) > 0 {
		t.Errorf("%d of %d cuts lost something", len(losses), tried)
	}
	t.Logf("%d cuts in a history of %d calls with answers to %d readings", tried, len(r.events), len(r.sent))
}

// TestPowerLossIsNoticedWithoutSync shows that the test above can fail: a
// build that doesn't sync must lose something.
func TestPowerLossIsNoticedWithoutSync(t *testing.T) {
	random := newRandom(t)
	r := recordRun(t, random, buildCommand(t, "-tags", "nosync"))
	losses, tried := r.cutPower(t, random, 100)
	if len(losses) == 0 {
		t.Errorf("a build without sync passes %d cuts; the power loss test proves nothing", tried)
	}
	t.Logf("%d of %d cuts lost something, as they must", len(losses), tried)
}

// recording is the history of a data directory and what its clients sent.
type recording struct {
	root     string
	events   []event
	sent     map[identity]entry
	answered map[int][]identity // by the line of the trace at which the answer began to leave
}

// recordRun lets three processes in turn, the second of them killed, take
// readings from three clients under strace.
func recordRun(t *testing.T, random *rand.Rand, binary string) *recording {
	t.Helper()
	work := t.TempDir()
	r := &recording{root: filepath.Join(work, "root"), sent: map[identity]entry{}, answered: map[int][]identity{}}
	if err := os.Mkdir(r.root, 0o700); err != nil {
		t.Fatal(err)
	}
	clock := new(atomic.Int64)
	clock.Store(time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC).UnixNano())
	lines := 0
	for life, signal := range []syscall.Signal{syscall.SIGTERM, syscall.SIGKILL, syscall.SIGTERM} {
		trace := filepath.Join(work, fmt.Sprintf("trace-%d", life))
		var journals []*journal
		for n := range 3 {
			journals = append(journals, &journal{
				name: fmt.Sprintf("p%dc%d", life, n), clock: clock, random: rand.New(rand.NewPCG(random.Uint64(), 0)),
			})
		}
		if err := r.record(t.Context(), binary, trace, signal, journals); err != nil {
			t.Fatal(err)
		}
		if err := r.add(trace, lines, journals); err != nil {
			t.Fatal(err)
		}
		lines = r.lastLine() + 1
	}
	if len(r.answered) < 100 {
		t.Fatalf("the traces show %d answers, too few", len(r.answered))
	}
	return r
}

func (r *recording) record(ctx context.Context, binary, trace string, signal syscall.Signal, journals []*journal) error {
	// With -D the process started is the one traced, so signals reach it.
	cmd := exec.CommandContext(ctx, "strace", "-D", "-f", "--seccomp-bpf", "-yy", "-xx", "-s", "10000000",
		"-e", "trace="+tracedCalls, "-o", trace,
		binary, "serve", "--data-dir", filepath.Join(r.root, "data"), "--http", "127.0.0.1:0", "--grpc", "127.0.0.1:0")
	process, err := launch(cmd)
	if err != nil {
		return err
	}
	var clients sync.WaitGroup
	faults := make([]error, len(journals))
	if faults[0] = declareAll(ctx, process.http); faults[0] == nil {
		for n, j := range journals {
			clients.Go(func() { faults[n] = j.postSome(ctx, process.http, 60) })
		}
	}
	clients.Wait()
	http.DefaultClient.CloseIdleConnections()
	code, err := process.stop(signal)
	if signal == syscall.SIGTERM && code != 0 {
		err = fmt.Errorf("the process ended with %d: %s", code, process.stderr)
	}
	return errors.Join(append(faults, err)...)
}

// postSome posts single readings and small batches, all of which must be
// applied.
func (j *journal) postSome(ctx context.Context, base string, requests int) error {
	client := &http.Client{Transport: &http.Transport{}}
	defer client.CloseIdleConnections()
	for n := range requests {
		size := 1
		if n%3 == 2 {
			size = 2 + j.random.IntN(20)
		}
		results, err := postBatch(ctx, client, base, j.next(size))
		if err != nil {
			return err
		}
		if err := j.take(results); err != nil {
			return err
		}
	}
	return nil
}

// add appends the trace of one process, with its lines numbered on from first.
func (r *recording) add(trace string, first int, journals []*journal) error {
	file, err := os.Open(trace)
	if err != nil {
		return err
	}
	defer file.Close()
	events, err := parseTrace(file, r.root)
	if err != nil {
		return err
	}
	for i := range events {
		events[i].begun += first
		if events[i].ended < 1<<40 {
			events[i].ended += first
		}
	}
	r.events = append(r.events, events...)
	byID := map[engine.ReadingID]identity{}
	for _, j := range journals {
		for _, e := range j.entries {
			r.sent[identity{e.quantity, e.id}] = e
			byID[e.id] = identity{e.quantity, e.id}
		}
	}
	return r.findAnswers(events, byID)
}

var answeredID = regexp.MustCompile(`"reading_id": ?"([^"]+)"`)

// findAnswers notes at which line the answer to each reading began to leave.
// An answer may be spread over several writes to a connection.
func (r *recording) findAnswers(events []event, byID map[engine.ReadingID]identity) error {
	streams := map[string][]byte{}
	found := 0
	for _, e := range events {
		if e.kind != eventAnswer {
			continue
		}
		stream := append(streams[e.path], e.data...)
		for _, m := range answeredID.FindAllSubmatchIndex(stream, -1) {
			key, ok := byID[engine.ReadingID(stream[m[2]:m[3]])]
			if !ok {
				return fmt.Errorf("the trace answers a reading %q that was not sent", stream[m[2]:m[3]])
			}
			r.answered[e.begun] = append(r.answered[e.begun], key)
			found++
		}
		if all := answeredID.FindAllIndex(stream, -1); len(all) > 0 {
			stream = stream[all[len(all)-1][1]:]
		}
		streams[e.path] = stream
	}
	if found != len(byID) {
		return fmt.Errorf("the trace shows the answers to %d of %d readings", found, len(byID))
	}
	return nil
}

func (r *recording) lastLine() int {
	last := 0
	for _, e := range r.events {
		last = max(last, e.begun)
		if e.ended < 1<<40 {
			last = max(last, e.ended)
		}
	}
	return last
}

// step is one end of a call.
type step struct {
	line int
	run  func()
}

// cutPower tries one image for each of the chosen moments, and returns what
// went wrong and how many there were.
func (r *recording) cutPower(t *testing.T, random *rand.Rand, cuts int) (losses []error, tried int) {
	t.Helper()
	d := newDisk(r.root)
	promised := map[identity]bool{}
	var steps []step
	for _, e := range r.events {
		steps = append(steps, step{e.begun, func() { d.begin(e) }}, step{e.ended, func() { d.end(e) }})
	}
	for line, keys := range r.answered {
		steps = append(steps, step{line, func() {
			for _, k := range keys {
				promised[k] = true
			}
		}})
	}
	slices.SortStableFunc(steps, func(a, b step) int { return a.line - b.line })
	at := r.chooseCuts(random, steps, cuts)
	done := 0
	for i, cut := range at {
		for ; done < cut; done++ {
			steps[done].run()
		}
		if err := r.tryImage(t, d, random, promised, i%10 == 0); err != nil {
			losses = append(losses, fmt.Errorf("cut %d, before step %d of %d: %w", i+1, cut+1, len(steps), err))
		}
	}
	return losses, len(at)
}

// chooseCuts returns in order, as numbers of steps, every moment until the
// first answer, so that the making of the ledger is covered, and cuts others.
func (r *recording) chooseCuts(random *rand.Rand, steps []step, cuts int) []int {
	first := slices.Min(slices.Collect(maps.Keys(r.answered)))
	var at []int
	for i, s := range steps {
		if s.line <= first {
			at = append(at, i)
		}
	}
	for range cuts {
		at = append(at, random.IntN(len(steps)+1))
	}
	slices.Sort(at)
	return at
}

func (r *recording) tryImage(t *testing.T, d *disk, random *rand.Rand, promised map[identity]bool, believe bool) error {
	dir, err := os.MkdirTemp(t.TempDir(), "image")
	if err != nil {
		t.Fatal(err)
	}
	defer os.RemoveAll(dir)
	if err := d.image(dir, random); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, "data", persist.FileName)
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) && len(promised) == 0 {
		return nil // cut before there was a ledger
	}
	found, err := readImage(path)
	if err != nil {
		return err
	}
	for _, e := range found {
		key := identity{e.quantity, e.id}
		if r.sent[key] != sentAs(e) {
			return fmt.Errorf("the image holds %+v, sent was %+v", e, r.sent[key])
		}
	}
	for key := range promised {
		if _, ok := found[key]; !ok {
			return fmt.Errorf("reading %s was acknowledged and is lost (%d of %d are there)", key.id, len(found), len(promised))
		}
	}
	if believe {
		return checkImageBeliefs(t.Context(), path, found)
	}
	return nil
}

// sentAs is an entry read back as its client remembers it.
func sentAs(e entry) entry {
	e.answered = true
	return e
}

// readImage opens a ledger and returns its applied readings.
func readImage(path string) (map[identity]entry, error) {
	ledger, err := persist.Open(persist.Options{Path: path, Now: time.Now})
	if err != nil {
		return nil, fmt.Errorf("open the image: %w", err)
	}
	found := map[identity]entry{}
	names := map[engine.QuantityNumber]engine.QuantityID{}
	err = ledger.Replay(1, func(rec *engine.Record) error {
		switch rec.Kind {
		case engine.KindDeclaration:
			names[rec.Number] = rec.Quantity
		case engine.KindReading:
			key := identity{names[rec.Number], rec.Reading.ID}
			if _, ok := found[key]; ok {
				return fmt.Errorf("reading %s is there twice", key.id)
			}
			found[key] = entry{quantity: key.quantity, id: key.id, time: rec.Reading.Time, value: rec.Reading.Value}
		default:
			return fmt.Errorf("the image holds a record of kind %d, which nobody asked for", rec.Kind)
		}
		return nil
	})
	return found, errors.Join(err, ledger.Close())
}

// checkImageBeliefs starts a keeper on the image and one afresh on the same
// readings; their beliefs must be the same to the bit. Then the image must
// take a further reading.
func checkImageBeliefs(ctx context.Context, path string, found map[identity]entry) error {
	j := &journal{}
	for _, e := range found {
		j.entries = append(j.entries, e)
	}
	at := engine.InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	fresh, err := freshKeeper(ctx, []*journal{j}, at, rand.New(rand.NewPCG(1, 1)))
	if err != nil {
		return err
	}
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		return persist.Open(persist.Options{Path: path, Now: time.Now})
	}})
	if err != nil {
		return fmt.Errorf("start on the image: %w", err)
	}
	for _, item := range crashPlan {
		if _, err := keeper.Quantity(item.id); err != nil {
			continue // cut before it was declared
		}
		got, err := freshBelief(ctx, keeper, item.id, at)
		if err != nil {
			return err
		}
		want, err := freshBelief(ctx, fresh, item.id, at)
		if err != nil {
			return err
		}
		if got != want {
			return fmt.Errorf("%s: belief from the image %+v, afresh %+v", item.id, got, want)
		}
	}
	return errors.Join(takeOneMore(ctx, keeper, at), keeper.Close(), fresh.Close())
}

func takeOneMore(ctx context.Context, keeper *engine.Keeper, at engine.Instant) error {
	item := crashPlan[0]
	if _, _, err := keeper.Declare(ctx, item.id, item.declaration, engine.Condition{}, at); err != nil {
		return err
	}
	results, err := keeper.Post(ctx, engine.Batch{Receive: at, Readings: []engine.Reading{
		{Quantity: item.id, ID: "one-more", Value: item.level},
	}})
	if err != nil {
		return err
	}
	if results[0].Status != engine.Applied {
		return fmt.Errorf("one more reading is %v %s", results[0].Status, results[0].Detail)
	}
	return nil
}
