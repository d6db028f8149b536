package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"math/rand/v2"
	"net/http"
	"os/exec"
	"path/filepath"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"leadline.example/engine"
)

var (
	killCount = flag.Int("kills", 4, "how often TestKilledProcessLosesNothing kills the process")
	seed      = flag.Uint64("seed", 0, "of random numbers; 0 takes one from the clock, which is printed")
)

// killsPerLedger bounds the journals and the replays: after so many kills the
// run goes on with a fresh ledger.
const killsPerLedger = 100

// newRandom returns random numbers whose seed is in the test's log.
func newRandom(t *testing.T) *rand.Rand {
	t.Helper()
	s := *seed
	if s == 0 {
		s = uint64(time.Now().UnixNano())
	}
	t.Logf("-seed %d", s)
	return rand.New(rand.NewPCG(s, 0))
}

// buildCommand builds the command with the given flags of go build.
func buildCommand(t *testing.T, flags ...string) string {
	t.Helper()
	file := filepath.Join(t.TempDir(), "leadline")
	args := append(append([]string{"build", "-o", file}, flags...), ".")
	if out, err := exec.Command("go", args...).CombinedOutput(); err != nil {
		t.Fatalf("go build %v: %v\n%s", flags, err, out)
	}
	return file
}

// TestKilledProcessLosesNothing kills the process at random moments under load
// from sixteen clients, and after each restart asks every client for what it
// remembers: nothing acknowledged is lost, nothing is applied twice, and the
// beliefs are those of the same readings afresh, to the last bit.
func TestKilledProcessLosesNothing(t *testing.T) {
	random := newRandom(t)
	binary := buildCommand(t)
	kills := *killCount
	if testing.Short() {
		kills = min(kills, 2)
	}
	for done := 0; done < kills; done += killsPerLedger {
		c := newCrashRun(t, binary, random)
		if err := c.run(t.Context(), min(killsPerLedger, kills-done)); err != nil {
			t.Fatal(err)
		}
		t.Logf("%d kills: %d readings acknowledged before the kill; of those under way %d had been committed, %d had not",
			min(killsPerLedger, kills-done), c.acknowledged, c.committed, c.dropped)
		if c.acknowledged == 0 || c.committed+c.dropped == 0 {
			t.Error("no kill hit a process under load; the test shows nothing")
		}
	}
}

// TestStoppedProcessFinishes stops the process under the same load, with a
// watcher connected, as an operator does: it ends by itself with exit code 0,
// and what it acknowledged is there.
func TestStoppedProcessFinishes(t *testing.T) {
	c := newCrashRun(t, buildCommand(t), newRandom(t))
	if err := c.stopUnderLoad(t.Context(), 0, syscall.SIGTERM); err != nil {
		t.Fatal(err)
	}
	if err := c.checkAfter(t.Context(), 0, engine.MinInstant, true); err != nil {
		t.Fatal(err)
	}
	if c.acknowledged == 0 {
		t.Error("nothing was acknowledged before the stop; the test shows nothing")
	}
}

func newCrashRun(t *testing.T, binary string, random *rand.Rand) *crashRun {
	t.Helper()
	c := &crashRun{binary: binary, dir: t.TempDir(), random: random, clock: new(atomic.Int64)}
	c.clock.Store(time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC).UnixNano())
	return c
}

// crashRun is the life of one ledger.
type crashRun struct {
	binary   string
	dir      string
	random   *rand.Rand
	clock    *atomic.Int64
	journals []*journal

	acknowledged int // readings answered while the load ran
	committed    int // readings that a kill left unanswered, found in the ledger
	dropped      int // readings that a kill left unanswered, not found
}

func (c *crashRun) run(ctx context.Context, kills int) error {
	for kill := range kills {
		if c.random.IntN(4) == 0 {
			if err := c.killAtStart(); err != nil {
				return err
			}
		}
		start := engine.Instant(c.clock.Load())
		if err := c.stopUnderLoad(ctx, kill, syscall.SIGKILL); err != nil {
			return fmt.Errorf("kill %d: %w", kill+1, err)
		}
		if err := c.checkAfter(ctx, kill, start, kill+1 == kills); err != nil {
			return fmt.Errorf("after kill %d: %w", kill+1, err)
		}
	}
	return nil
}

func (c *crashRun) command() *exec.Cmd {
	return exec.Command(c.binary, "serve", "--data-dir", c.dir, "--http", "127.0.0.1:0", "--grpc", "127.0.0.1:0",
		"--checkpoint-records", "2000") // so that kills fall into checkpoints too
}

// killAtStart kills a process that may be creating, opening or replaying the
// ledger, up to 30 ms from its start.
func (c *crashRun) killAtStart() error {
	cmd := c.command()
	if err := cmd.Start(); err != nil {
		return err
	}
	<-time.After(time.Duration(c.random.Int64N(int64(30 * time.Millisecond))))
	if err := cmd.Process.Kill(); err != nil {
		return err
	}
	if err := cmd.Wait(); err != nil && cmd.ProcessState.ExitCode() != -1 {
		return fmt.Errorf("a process that was to be killed ended by itself: %w", err)
	}
	return nil
}

// stopUnderLoad sends a signal to a process 20 to 500 ms after sixteen clients
// have begun: ten post single readings, four batches, two stream. Another one
// watches.
func (c *crashRun) stopUnderLoad(ctx context.Context, round int, signal syscall.Signal) error {
	process, err := launch(c.command())
	if err != nil {
		return err
	}
	if err := declareAll(ctx, process.http); err != nil {
		return err
	}
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var clients sync.WaitGroup
	var killed atomic.Bool
	var fault atomic.Pointer[error]
	begin := len(c.journals)
	for n := range 16 {
		j := &journal{
			name: fmt.Sprintf("k%dc%d", round, n), clock: c.clock,
			random: rand.New(rand.NewPCG(c.random.Uint64(), 0)),
		}
		c.journals = append(c.journals, j)
		clients.Go(func() {
			if err := j.load(ctx, n, process); isFault(err, killed.Load()) {
				fault.Store(&err)
			}
		})
	}
	clients.Go(func() { watch(ctx, process.http) })
	<-time.After(20*time.Millisecond + time.Duration(c.random.Int64N(int64(480*time.Millisecond))))
	killed.Store(true)
	code, err := process.stop(signal)
	if signal == syscall.SIGTERM && code != 0 {
		err = errors.Join(err, fmt.Errorf("after SIGTERM under load the process ended with %d: %s", code, process.stderr))
	}
	clients.Wait()
	if f := fault.Load(); f != nil {
		return errors.Join(*f, fmt.Errorf("the process said: %s", process.stderr))
	}
	for _, j := range c.journals[begin:] {
		c.acknowledged += len(j.entries) - len(j.unanswered())
	}
	return err
}

// watch follows the beliefs until the server ends it.
func watch(ctx context.Context, base string) {
	request, err := http.NewRequestWithContext(ctx, http.MethodGet, base+"/v1/beliefs:watch", nil)
	if err != nil {
		return
	}
	client := &http.Client{Transport: &http.Transport{}}
	defer client.CloseIdleConnections()
	if response, err := client.Do(request); err == nil {
		_, _ = io.Copy(io.Discard, response.Body)
		_ = response.Body.Close()
	}
}

// isFault tells whether a client's error is more than the kill it met.
func isFault(err error, killed bool) bool {
	var wrong *wrongAnswer
	return !killed || errors.As(err, &wrong)
}

// load is what client n of sixteen does until something fails.
func (j *journal) load(ctx context.Context, n int, process *running) error {
	client := &http.Client{Transport: &http.Transport{MaxIdleConnsPerHost: 1}}
	defer client.CloseIdleConnections()
	switch {
	case n < 10:
		return j.postSingles(ctx, client, process.http)
	case n < 14:
		return j.postBatches(ctx, client, process.http)
	}
	return j.postStream(ctx, process.grpc)
}

// checkAfter restarts the process and checks the ledger, first the part that
// the last load wrote; the whole, and the beliefs, now and then and at the end.
func (c *crashRun) checkAfter(ctx context.Context, kill int, start engine.Instant, last bool) error {
	ctx, cancel := context.WithTimeout(ctx, 2*time.Minute)
	defer cancel()
	process, err := launch(c.command())
	if err != nil {
		return err
	}
	defer http.DefaultClient.CloseIdleConnections()
	defer func() { _, _ = process.stop(syscall.SIGKILL) }()
	if err := c.retryAll(ctx, process.http); err != nil {
		return err
	}
	end := engine.Instant(c.clock.Load()) + 1
	window := start - engine.Instant(time.Minute)
	everything := last || kill%20 == 19
	if everything {
		window = engine.MinInstant
	}
	if err := checkStored(ctx, process.http, c.journals, window, end); err != nil {
		return err
	}
	if everything {
		if err := checkBeliefs(ctx, process.http, c.journals, end, c.random); err != nil {
			return err
		}
	}
	if kill%2 == 0 && !last {
		return nil // killed as it is
	}
	code, err := process.stop(syscall.SIGTERM)
	if err != nil || code != 0 {
		return fmt.Errorf("after SIGTERM the process ended with %d (%v): %s", code, err, process.stderr)
	}
	return nil
}

// retryAll sends again what the kill left unanswered, which must now be APPLIED
// or DUPLICATE, and some of what was answered, which must be DUPLICATE.
func (c *crashRun) retryAll(ctx context.Context, base string) error {
	for _, j := range c.journals[max(0, len(c.journals)-16):] {
		open := j.unanswered()
		known := j.sampleAnswered(50)
		if len(open)+len(known) == 0 {
			continue
		}
		results, err := postBatch(ctx, http.DefaultClient, base, append(open, known...))
		if err != nil {
			return err
		}
		for i, r := range results {
			switch {
			case r.Status == "DUPLICATE" && i < len(open):
				c.committed++
			case r.Status == "APPLIED" && i < len(open):
				c.dropped++
			case r.Status != "DUPLICATE":
				return fmt.Errorf("acknowledged reading %s is %s %s on the retry, want DUPLICATE", r.ReadingID, r.Status, r.Detail)
			}
			if err := j.answer(engine.ReadingID(r.ReadingID)); err != nil {
				return err
			}
		}
	}
	return nil
}

// sampleAnswered draws up to n entries that were answered.
func (j *journal) sampleAnswered(n int) []entry {
	var sample []entry
	for _, i := range j.random.Perm(len(j.entries)) {
		if len(sample) == n {
			break
		}
		if j.entries[i].answered {
			sample = append(sample, j.entries[i])
		}
	}
	return sample
}
