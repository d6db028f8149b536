package persist

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
)

// settleDirectory makes the name of a ledger that is locked and sound durable,
// whoever gave it: a process may have ended between that and its sync of the
// directory, and what is acknowledged in a file without a name is lost. It
// removes what killed processes left unfinished, too.
func settleDirectory(path string, locked *os.File) error {
	if err := checkName(path, locked); err != nil {
		return err
	}
	if err := removeLeftovers(path); err != nil {
		return err
	}
	return syncDirectory(path)
}

// checkName tells whether path still means the locked file. It doesn't where
// its last holder salvaged the ledger after this process had opened the file.
func checkName(path string, locked *os.File) error {
	ours, err := locked.Stat()
	if err != nil {
		return err
	}
	named, err := os.Stat(path)
	if err == nil && os.SameFile(ours, named) {
		return nil
	}
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	return fmt.Errorf("%w: the file was replaced while this process waited for it", ErrHeld)
}

// temporarySuffix is of files that take a ledger's name once they are complete.
const temporarySuffix = ".new-*"

// removeLeftovers removes unfinished files of processes that were killed. Only
// the holder of the ledger salvages it, so none is in use. One that can't be
// removed costs space, but is no reason not to start.
func removeLeftovers(path string) error {
	entries, err := os.ReadDir(filepath.Dir(path))
	if err != nil {
		return err
	}
	prefix := filepath.Base(path) + strings.TrimSuffix(temporarySuffix, "*")
	for _, e := range entries {
		random, ok := strings.CutPrefix(e.Name(), prefix)
		if ok && e.Type().IsRegular() && isDigits(random) {
			os.Remove(filepath.Join(filepath.Dir(path), e.Name()))
		}
	}
	return nil
}

// isDigits tells whether text is what os.CreateTemp puts in place of a star.
func isDigits(text string) bool {
	return text != "" && strings.Trim(text, "0123456789") == ""
}

func syncDirectory(path string) error {
	d, err := os.Open(filepath.Dir(path))
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}
