package main

import (
	"fmt"
	"os"
	"os/exec"
	"runtime"
	"slices"
	"strings"
	"time"
)

// contender is one way to do the job.
type contender struct {
	name string
	run  func(d time.Duration) (readings int, err error)
	at   *process // whose CPU time is told, if not nil
}

// series is the rates of a contender, one for each turn.
type series []float64

func (s series) sorted() series { return slices.Sorted(slices.Values(s)) }
func (s series) median() float64 {
	t := s.sorted()
	return (t[(len(t)-1)/2] + t[len(t)/2]) / 2
}
func (s series) spread() (low, high float64) { return slices.Min(s), slices.Max(s) }

// over returns the quotients of turns that followed each other.
func (s series) over(t series) series {
	q := make(series, len(s))
	for i := range s {
		q[i] = s[i] / t[i]
	}
	return q
}

// alternate gives every contender its turn, and again, and prints the rates.
func (b *bench) alternate(contenders ...contender) ([]series, error) {
	all := make([]series, len(contenders))
	costs := make([]series, len(contenders)) // CPU time of the server a reading
	own := make([]series, len(contenders))   // likewise of this process
	for round := -1; round < b.rounds; round++ {
		for i, c := range contenders {
			if err := b.ctx.Err(); err != nil {
				return nil, err
			}
			window := b.window
			if round < 0 {
				window /= 4 // to warm up, not counted
			}
			runtime.GC()
			cpu, ours := c.at.cpu(), ownCPU()
			began := time.Now()
			n, err := c.run(window)
			if err != nil {
				return nil, fmt.Errorf("%s: %w", c.name, err)
			}
			if round >= 0 {
				all[i] = append(all[i], float64(n)/time.Since(began).Seconds())
				costs[i] = append(costs[i], float64((c.at.cpu()-cpu).Nanoseconds())/1e3/float64(max(n, 1)))
				own[i] = append(own[i], float64((ownCPU()-ours).Nanoseconds())/1e3/float64(max(n, 1)))
			}
		}
	}
	for i, c := range contenders {
		low, high := all[i].spread()
		cost := ""
		if c.at != nil {
			cost = fmt.Sprintf("  CPU a reading: server %.2f us, client %.2f us", costs[i].median(), own[i].median())
		}
		fmt.Printf("%-58s %9.0f readings/s  (%.0f to %.0f)%s\n", c.name, all[i].median(), low, high, cost)
	}
	return all, nil
}

// target is a ratio of the requirements.
type target struct {
	text   string
	ratio  float64
	bound  float64
	atMost bool
}

func (t target) met() bool {
	if t.atMost {
		return t.ratio <= t.bound
	}
	return t.ratio >= t.bound
}

// ratio prints the quotient of two series, and keeps it if it has a bound.
func (b *bench) ratio(text string, ours, theirs series, atLeast float64) {
	q := ours.over(theirs)
	low, high := q.spread()
	fmt.Printf("  %-56s %10.3f             (%.3f to %.3f)\n", text, q.median(), low, high)
	if atLeast > 0 {
		b.targets = append(b.targets, target{text: text, ratio: q.median(), bound: atLeast})
	}
}

// figure prints a ratio or count, and keeps it with its bound.
func (b *bench) figure(text string, value, bound float64, atMost bool) {
	fmt.Printf("  %-56s %10.3f\n", text, value)
	b.targets = append(b.targets, target{text, value, bound, atMost})
}

func (b *bench) printTargets() {
	if len(b.targets) == 0 {
		return
	}
	fmt.Printf("\n== what was asked for\n")
	for _, t := range b.targets {
		word, bound := "missed", "at least"
		if t.met() {
			word = "met"
		}
		if t.atMost {
			bound = "at most"
		}
		fmt.Printf("%-58s %8.3f  %s %g: %s\n", t.text, t.ratio, bound, t.bound, word)
	}
}

// quantiles are of latencies.
type quantiles struct{ p50, p99, most time.Duration }

func quantilesOf(all []time.Duration) quantiles {
	if len(all) == 0 {
		return quantiles{}
	}
	slices.Sort(all)
	at := func(q float64) time.Duration { return all[min(int(q*float64(len(all))), len(all)-1)] }
	return quantiles{at(0.50), at(0.99), all[len(all)-1]}
}

func (q quantiles) String() string {
	ms := func(d time.Duration) string { return fmt.Sprintf("%.2f", d.Seconds()*1e3) }
	return fmt.Sprintf("p50 %s  p99 %s  max %s ms", ms(q.p50), ms(q.p99), ms(q.most))
}

func (b *bench) printMachine() {
	fmt.Printf("%s, %s/%s, %d of the machine's CPUs: %s\n", runtime.Version(), runtime.GOOS, runtime.GOARCH, runtime.GOMAXPROCS(0), firstMatch("/proc/cpuinfo", "model name"))
	fmt.Printf("kernel %s; directory %s\n", output("uname", "-r"), b.tmp)
	fmt.Printf("disk: %s\n", lastLine(output("df", "-T", b.tmp)))
	fmt.Printf("load when started: %s; memory %s\n", firstMatch("/proc/loadavg", ""), firstMatch("/proc/meminfo", "MemTotal"))
	fmt.Printf("every reading is durable: fdatasync before each answer, on both sides of every comparison that has a disk\n")
	fmt.Printf("%d turns of %v each, medians (and lowest to highest)\n", b.rounds, b.window)
}

func firstMatch(file, key string) string {
	data, err := os.ReadFile(file)
	if err != nil {
		return "unknown"
	}
	for line := range strings.Lines(string(data)) {
		if strings.HasPrefix(line, key) {
			_, value, found := strings.Cut(line, ":")
			if !found {
				value = line
			}
			return strings.TrimSpace(value)
		}
	}
	return "unknown"
}

func output(name string, args ...string) string {
	out, err := exec.Command(name, args...).Output()
	if err != nil {
		return "unknown"
	}
	return strings.TrimSpace(string(out))
}

func lastLine(s string) string { return s[strings.LastIndexByte(s, '\n')+1:] }
