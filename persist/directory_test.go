package persist_test

import (
	"errors"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"leadline.example/persist"
)

// TestOpenRemovesLeftovers of killed processes, and nothing else; and not while
// another process has the ledger, whose salvage may be under way, nor beside a
// damaged one.
func TestOpenRemovesLeftovers(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, persist.FileName)
	openAt(t, path).Close()
	image, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	leftovers := []string{"leadline.db.new-1", "leadline.db.new-0123456789"}
	others := []string{
		"leadline.db.new-", "leadline.db.new-12a", "leadline.db.new-12.gz", "leadline.db.new-copy", "leadline.db.new",
		"leadline.db.old-12", "aleadline.db.new-12", "brine.db.new-12", "leadline.db-new-12",
	}
	for _, name := range slices.Concat(leftovers, others) {
		restore(t, filepath.Join(dir, name), []byte("half a ledger"))
	}
	link, directory := "leadline.db.new-7", "leadline.db.new-8"
	if err := errors.Join(os.Symlink("brine.db.new-12", filepath.Join(dir, link)), os.Mkdir(filepath.Join(dir, directory), 0o700)); err != nil {
		t.Fatal(err)
	}
	kept := append(slices.Clone(others), persist.FileName, link, directory)

	restore(t, path, image[:8192])
	if _, err := persist.Open(persist.Options{Path: path}); !errors.Is(err, persist.ErrDamaged) {
		t.Fatalf("a damaged file: %v", err)
	}
	wantNames(t, "after a damaged ledger was refused", dir, slices.Concat(kept, leftovers))

	restore(t, path, image)
	l := openAt(t, path)
	wantNames(t, "after an Open", dir, kept)

	for _, name := range leftovers {
		restore(t, filepath.Join(dir, name), []byte("half a ledger"))
	}
	if _, err := persist.Open(persist.Options{Path: path}); !errors.Is(err, persist.ErrHeld) {
		t.Fatalf("a held ledger: %v", err)
	}
	wantNames(t, "after a held ledger was refused", dir, slices.Concat(kept, leftovers))
	l.Close()
}

func wantNames(t *testing.T, when, dir string, want []string) {
	t.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, e := range entries {
		got = append(got, e.Name())
	}
	slices.Sort(want)
	if !slices.Equal(want, got) {
		t.Errorf("%s the directory has %v; want %v", when, got, want)
	}
}

// TestReplacedWhileWaiting: a process that waits for a file which its holder
// replaces by a salvaged one must not take the old one, which has lost its name.
func TestReplacedWhileWaiting(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l := openAt(t, path)
	image, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	salvaged := path + ".salvaged"
	restore(t, salvaged, image)
	opened := make(chan error, 1)
	go func() {
		second, err := persist.Open(persist.Options{Path: path})
		if err == nil {
			second.Close()
		}
		opened <- err
	}()
	for descriptors(t, path) < 2 && len(opened) == 0 { // until the second one has the file open
	}
	if err := errors.Join(os.Rename(salvaged, path), l.Close()); err != nil {
		t.Fatal(err)
	}
	if err := <-opened; !errors.Is(err, persist.ErrHeld) {
		t.Errorf("Open of a file that was replaced: %v; want ErrHeld", err)
	}
}

// descriptors counts how often this process has a file open.
func descriptors(t *testing.T, path string) (n int) {
	t.Helper()
	const all = "/proc/self/fd"
	entries, err := os.ReadDir(all)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		if at, err := os.Readlink(filepath.Join(all, e.Name())); err == nil && at == path {
			n++
		}
	}
	return n
}
