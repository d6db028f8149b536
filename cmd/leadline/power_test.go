//go:build services

package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
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
)

var cutCount = flag.Int("cuts", 500, "how many power losses TestPowerLoss tries")

// TestPowerLossLosesNothing records every write, sync and answer of real
// processes, and then, for many moments, what a power loss at that moment may
// leave of the files. Every such image must open, hold every reading whose
// answer had begun to leave, and nothing that was never sent.
func TestPowerLossLosesNothing(t *testing.T) {
	random := newRandom(t)
	binary := buildCommand(t)
	r := recordRun(t, random, binary)
	losses, tried := r.cutPower(t, random, cutting{cuts: *cutCount, birth: true, enough: 5, verify: 5, believe: 10, binary: binary})
	for _, err := range losses {
		t.Error(err)
	}
	t.Logf("%d cuts in a history of %d calls with answers to %d readings", tried, len(r.events), len(r.sent))
}

// TestPowerLossIsNoticedWithoutSync shows that the test above can fail: a
// build that doesn't sync must lose something.
func TestPowerLossIsNoticedWithoutSync(t *testing.T) {
	random := newRandom(t)
	binary := buildCommand(t, "-tags", "nosync")
	r := recordRun(t, random, binary)
	losses, tried := r.cutPower(t, random, cutting{cuts: 100, enough: 100, verify: 1, believe: 1, binary: binary})
	if len(losses) == 0 {
		t.Errorf("a build without sync passes %d cuts; the power loss test proves nothing", tried)
	}
	t.Logf("%d of %d cuts lost something, as they must, the first: %v", len(losses), tried, errors.Join(losses[:min(3, len(losses))]...))
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
	if err := checkNamesSynced(events, r.root, filepath.Join(r.root, "data")); err != nil {
		return err
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

// checkNamesSynced wants these directories synced before the first answer of a
// process: it can't know whether the one before it, which made the names in
// them, lived to sync them.
func checkNamesSynced(events []event, directories ...string) error {
	first := slices.IndexFunc(events, func(e event) bool { return e.kind == eventAnswer })
	for _, directory := range directories {
		synced := func(e event) bool { return e.kind == eventSync && e.path == directory }
		if !slices.ContainsFunc(events[:max(first, 0)], synced) {
			return fmt.Errorf("%s isn't synced before the first answer", directory)
		}
	}
	return nil
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
