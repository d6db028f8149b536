package main

import (
	"context"
	"errors"
	"flag"
	"io/fs"
	"os"

	"leadline.example/persist"
)

// runVerify checks a ledger file and prints what it holds; damage is located
// on standard output, and the exit code is 3.
func runVerify(_ context.Context, args []string, p process) error {
	path, err := verifyArgument(args, p)
	if err != nil {
		return err
	}
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
		return usagef("there is no file %s; give the ledger's file, DATA-DIR/%s", path, persist.FileName)
	}
	return persist.Verify(path, p.stdout)
}

func verifyArgument(args []string, p process) (string, error) {
	flags := flag.NewFlagSet("verify", flag.ContinueOnError)
	if len(args) == 1 && args[0] != "" && args[0][0] != '-' {
		return args[0], nil
	}
	if len(args) > 0 {
		if err := parseFlags(flags, args, p.stdout); err != nil {
			return "", err
		}
	}
	return "", usagef("give one file: leadline verify DATA-DIR/%s", persist.FileName)
}
