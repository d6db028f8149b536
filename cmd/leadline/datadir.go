package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
)

// makeDataDir makes dir and its parents where they are absent, and syncs the
// directories in which it made names: the ledger syncs its own directory, but
// that is no use if a power loss takes away the directory itself.
func makeDataDir(dir string) error {
	dir, err := filepath.Abs(dir)
	if err != nil {
		return fmt.Errorf("find the data directory: %w", err)
	}
	var parents []string
	for at := dir; ; at = filepath.Dir(at) {
		if _, err := os.Stat(at); !errors.Is(err, fs.ErrNotExist) {
			break
		}
		parents = append(parents, filepath.Dir(at))
	}
	if err := os.MkdirAll(dir, 0o700); err != nil {
		return fmt.Errorf("make the data directory: %w", err)
	}
	for _, parent := range parents {
		if err := syncDir(parent); err != nil {
			return fmt.Errorf("make the data directory last: %w", err)
		}
	}
	return nil
}

func syncDir(dir string) error {
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}
