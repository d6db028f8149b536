// Command bench measures the service against what could stand in its place:
// a bare loop over the same storage library, the same server with nothing
// behind it, the stock gateway, a database used by hand. Everything of one
// comparison runs in the same process group, on the same two cores, in turns,
// so the ratios mean something where the figures depend on the machine.
//
// .ci/bench/run builds and runs it.
package main

import (
	"context"
	"flag"
	"fmt"
	"os"
	"os/signal"
	"path/filepath"
	"regexp"
	"runtime/pprof"
	"syscall"
	"time"
)

func main() {
	if err := run(os.Args[1:]); err != nil {
		fmt.Fprintln(os.Stderr, "bench:", err)
		os.Exit(1)
	}
}

// settings is what the flags say.
type settings struct {
	leadline string
	dir      string
	only     *regexp.Regexp
	rounds   int
	window   time.Duration
	quick    bool
	large    bool
	profile  string
}

func run(args []string) error {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	if len(args) > 1 && args[0] == "stand-in" {
		return serveStandIn(ctx, args[1], args[2:])
	}
	var s settings
	var only string
	flags := flag.NewFlagSet("bench", flag.ContinueOnError)
	flags.StringVar(&s.leadline, "leadline", "", "`binary` of the service")
	flags.StringVar(&s.dir, "dir", os.TempDir(), "`directory`, on the disk to measure, for a directory that is removed at the end")
	flags.StringVar(&only, "only", "", "run the sections whose name matches this `pattern`")
	flags.IntVar(&s.rounds, "rounds", 7, "turns of each contender")
	flags.DurationVar(&s.window, "window", 2*time.Second, "length of a turn")
	flags.BoolVar(&s.quick, "quick", false, "two short turns of each: does it run at all")
	flags.BoolVar(&s.large, "large", false, "also 100,000 quantities and 5,000,000 readings: start-up, memory and disk")
	flags.StringVar(&s.profile, "profile", "", "write CPU profiles of the service to this `directory`, with the service built into this program")
	if err := flags.Parse(args); err != nil {
		return err
	}
	if flags.NArg() > 0 {
		return fmt.Errorf("%q is not a flag", flags.Arg(0))
	}
	if s.quick {
		s.rounds, s.window = 2, 400*time.Millisecond
	}
	var err error
	if s.only, err = regexp.Compile(only); err != nil {
		return err
	}
	if s.leadline == "" && s.profile == "" {
		return fmt.Errorf("-leadline is missing; give the service's binary, or use .ci/bench/run")
	}
	return measure(ctx, s)
}

// bench is one run of the program.
type bench struct {
	settings
	ctx     context.Context
	tmp     string
	targets []target
}

// section is one comparison.
type section struct {
	name string
	run  func(*bench) error
}

// sections lists what is measured, by name, in order.
func sections() []section {
	return []section{
		{"update", (*bench).update},
		{"joint", (*bench).joint},
		{"stream", (*bench).stream},
		{"batch", (*bench).batch},
		{"single", (*bench).single},
		{"postgresql", (*bench).postgresql},
		{"scrape", (*bench).scrape},
		{"commit", (*bench).commit},
		{"large", (*bench).largeScale},
	}
}

func measure(ctx context.Context, s settings) (err error) {
	b := &bench{settings: s, ctx: ctx}
	if b.tmp, err = os.MkdirTemp(s.dir, "leadline-bench-"); err != nil {
		return err
	}
	defer os.RemoveAll(b.tmp)
	began := time.Now()
	b.printMachine()
	for _, section := range sections() {
		if !s.only.MatchString(section.name) || section.name == "large" && !s.large {
			continue
		}
		fmt.Printf("\n== %s\n", section.name)
		if err := section.run(b); err != nil {
			return fmt.Errorf("%s: %w", section.name, err)
		}
	}
	b.printTargets()
	fmt.Printf("\ntook %v\n", time.Since(began).Round(time.Second))
	return ctx.Err()
}

// profiled runs fn and, if asked to, writes its CPU profile.
func (b *bench) profiled(name string, fn func() error) error {
	if b.profile == "" {
		return fn()
	}
	file, err := os.Create(filepath.Join(b.profile, name+".cpu"))
	if err != nil {
		return err
	}
	defer file.Close()
	if err := pprof.StartCPUProfile(file); err != nil {
		return err
	}
	defer pprof.StopCPUProfile()
	return fn()
}
