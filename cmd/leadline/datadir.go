package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
)

// makeDataDir makes dir and its parents where they are absent, and syncs the
// directories that hold their names: the ledger syncs its own directory, but
// that is no use if a power loss takes away the directory itself.
func makeDataDir(dir string) error {
	dir, err := filepath.Abs(dir)
	if err != nil {
		return fmt.Errorf("find the data directory: %w", err)
	}
	if err := makeDir(dir); err != nil {
		return fmt.Errorf("make the data directory last: %w", err)
	}
	return nil
}

// makeDir makes one name after another durable. That of a directory which is
// there is synced too: a process may have been killed after it made it.
func makeDir(dir string) error {
	parent := filepath.Dir(dir)
	_, err := os.Stat(dir)
	absent := errors.Is(err, fs.ErrNotExist)
	if absent {
		if err := makeDir(parent); err != nil {
			return err
		}
	}
	if err := os.MkdirAll(dir, 0o700); err != nil {
		return err
	}
	err = syncDir(parent)
	if !absent && errors.Is(err, fs.ErrPermission) {
		return nil // who may not read the parent found dir there, and didn't make it
	}
	return err
}

func syncDir(dir string) error {
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}
