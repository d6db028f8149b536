package main

import (
	"errors"
	"flag"
	"fmt"
	"io"
	"log/slog"
	"net"
	"strings"
	"time"
)

// settings is what the flags of serve and demo say.
type settings struct {
	dataDir         string
	http            string
	grpc            string
	listenAnywhere  bool
	maxClockSkew    time.Duration
	duplicateWindow int
	refusedLog      int
	checkpointEvery int
	maxQuantities   int
	logFormat       string
	logLevel        slog.Level
}

// envOr returns the environment variable name, or fallback if it is empty.
func envOr(env func(string) string, name, fallback string) string {
	if v := env(name); v != "" {
		return v
	}
	return fallback
}

// declareFlags binds the flags that serve and demo share to s. The environment
// gives the default of a flag, so a flag on the command line wins.
func declareFlags(flags *flag.FlagSet, s *settings, env func(string) string) {
	flags.StringVar(&s.http, "http", envOr(env, "LEADLINE_HTTP", "127.0.0.1:8080"),
		"`address` of REST, metrics and health; port 0 takes a free one (environment LEADLINE_HTTP)")
	flags.StringVar(&s.grpc, "grpc", envOr(env, "LEADLINE_GRPC", "127.0.0.1:8081"),
		"`address` of gRPC; port 0 takes a free one (environment LEADLINE_GRPC)")
	flags.BoolVar(&s.listenAnywhere, "listen-anywhere", false,
		"allow addresses beyond loopback and requests to any host name, although nobody who reaches them is asked who they are")
	flags.DurationVar(&s.maxClockSkew, "max-clock-skew", 5*time.Minute,
		"how far in the future the time of a reading may lie")
	flags.IntVar(&s.duplicateWindow, "duplicate-window", 1_000_000,
		"how many reading IDs of the last 24 h are recognised whatever their time")
	flags.IntVar(&s.refusedLog, "refused-log", 100_000,
		"how many refused readings, the latest of any reason, can be listed and put through")
	flags.IntVar(&s.checkpointEvery, "checkpoint-records", 0,
		"how many records lie between checkpoints; 0 takes 65,536, or sixteen for every quantity if that is more")
	flags.IntVar(&s.maxQuantities, "max-quantities", 10_000,
		"how many quantities /metrics publishes, the first by ID")
	flags.StringVar(&s.logFormat, "log-format", "text", "text or json, on standard error")
	flags.TextVar(&s.logLevel, "log-level", slog.LevelInfo, "DEBUG, INFO, WARN or ERROR")
}

// parseFlags parses args, which must be flags only. Asking for help prints it
// to stdout and gives errHelp.
func parseFlags(flags *flag.FlagSet, args []string, stdout io.Writer) error {
	flags.SetOutput(io.Discard)
	flags.Usage = func() {}
	err := flags.Parse(args)
	if errors.Is(err, flag.ErrHelp) {
		fmt.Fprintf(stdout, "Usage: leadline %s [flags]\n\n", flags.Name())
		flags.SetOutput(stdout)
		flags.PrintDefaults()
		return errHelp
	}
	if err != nil {
		return usagef("%v; see leadline %s --help", err, flags.Name())
	}
	if flags.NArg() > 0 {
		return usagef("%q is not a flag; see leadline %s --help", flags.Arg(0), flags.Name())
	}
	return nil
}

// validate refuses settings that can't work or that open the service to a
// network by accident.
func (s *settings) validate() error {
	if err := checkAddress("--http", s.http, s.listenAnywhere); err != nil {
		return err
	}
	if err := checkAddress("--grpc", s.grpc, s.listenAnywhere); err != nil {
		return err
	}
	if s.maxClockSkew <= 0 {
		return usagef("--max-clock-skew is %v; give a duration above 0, such as 5m", s.maxClockSkew)
	}
	for _, count := range []struct {
		flag  string
		value int
	}{
		{"--duplicate-window", s.duplicateWindow},
		{"--refused-log", s.refusedLog},
		{"--max-quantities", s.maxQuantities},
	} {
		if count.value < 1 {
			return usagef("%s is %d; give 1 or more", count.flag, count.value)
		}
	}
	if s.checkpointEvery < 0 {
		return usagef("--checkpoint-records is %d; give 0 or more", s.checkpointEvery)
	}
	if s.logFormat != "text" && s.logFormat != "json" {
		return usagef("--log-format is %q; give text or json", s.logFormat)
	}
	return nil
}

// checkAddress refuses an address that is not host:port, or that lies beyond
// loopback without the flag that says so: there is no authentication yet.
func checkAddress(name, address string, anywhere bool) error {
	host, _, err := net.SplitHostPort(address)
	if err != nil {
		return usagef("%s is %q; give host:port, such as 127.0.0.1:8080", name, address)
	}
	if anywhere || isLoopback(host) {
		return nil
	}
	return usagef("%s is %q, which others can reach, and the service asks nobody who they are;"+
		" listen on 127.0.0.1, or add --listen-anywhere if the network is trusted", name, address)
}

// isLoopback tells whether host is surely this machine only. A name other than
// localhost could resolve to anything, and an empty host means every address.
func isLoopback(host string) bool {
	if strings.EqualFold(host, "localhost") {
		return true
	}
	ip := net.ParseIP(host)
	return ip != nil && ip.IsLoopback()
}

// newLogger logs to w as the settings say.
func (s *settings) newLogger(w io.Writer) *slog.Logger {
	options := &slog.HandlerOptions{Level: s.logLevel}
	if s.logFormat == "json" {
		return slog.New(slog.NewJSONHandler(w, options))
	}
	return slog.New(slog.NewTextHandler(w, options))
}
