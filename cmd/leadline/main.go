// Command leadline keeps one belief per quantity from the readings posted to
// it. It wires flags, files, sockets and signals to the packages that do the
// work and decides nothing itself.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"
)

// The exit codes of the command.
const (
	exitOK      = 0
	exitFailure = 1 // anything not named below, such as an address in use
	exitUsage   = 2 // a wrong command line; nothing was started
	exitLedger  = 3 // the ledger's file is held by another process or damaged
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	// Once a stop is under way a second signal has its usual, immediate effect.
	context.AfterFunc(ctx, stop)
	os.Exit(run(ctx, os.Args[1:], os.Stdout, os.Stderr, os.Getenv))
}

// command is one subcommand. run returns when it is done or ctx is.
type command struct {
	name    string
	summary string
	run     func(ctx context.Context, args []string, p process) error
}

// process is what a command may use of its surroundings.
type process struct {
	stdout io.Writer
	stderr io.Writer
	env    func(string) string
}

func commands() []command {
	return []command{
		{"serve", "keep beliefs: serve REST, gRPC and metrics until a signal to stop", runServe},
		{"demo", "the same on a throw-away ledger, with an invented ice plant feeding it", runDemo},
		{"verify", "check every record of a ledger file that no process holds", runVerify},
		{"version", "print the version", runVersion},
	}
}

// run executes one command line and returns the exit code.
func run(ctx context.Context, args []string, stdout, stderr io.Writer, env func(string) string) int {
	p := process{stdout: stdout, stderr: stderr, env: env}
	if len(args) == 0 {
		printHelp(stderr)
		return exitUsage
	}
	switch args[0] {
	case "help", "-h", "-help", "--help":
		printHelp(stdout)
		return exitOK
	}
	for _, c := range commands() {
		if c.name == args[0] {
			return exitCode(c.name, c.run(ctx, args[1:], p), stderr)
		}
	}
	fmt.Fprintf(stderr, "leadline: there is no command %q; see leadline help\n", args[0])
	return exitUsage
}

func printHelp(w io.Writer) {
	fmt.Fprintln(w, "Usage: leadline COMMAND [flags]")
	fmt.Fprintln(w)
	for _, c := range commands() {
		fmt.Fprintf(w, "  %-8s %s\n", c.name, c.summary)
	}
	fmt.Fprintln(w, "\nleadline COMMAND --help prints the flags of a command.")
}

// usageError is a command line that can't be carried out as it stands.
type usageError struct{ message string }

func (e *usageError) Error() string { return e.message }

func usagef(format string, args ...any) error {
	return &usageError{fmt.Sprintf(format, args...)}
}

// errHelp reports that the help was asked for and printed.
var errHelp = errors.New("help was printed")

// exitCode says on stderr what went wrong, if anything, and turns it into a
// number.
func exitCode(command string, err error, stderr io.Writer) int {
	if err == nil || errors.Is(err, errHelp) {
		return exitOK
	}
	fmt.Fprintf(stderr, "leadline %s: %v\n", command, err)
	var usage *usageError
	switch {
	case errors.As(err, &usage):
		return exitUsage
	case isLedgerError(err):
		return exitLedger
	}
	return exitFailure
}
