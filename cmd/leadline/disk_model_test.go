package main

import (
	"bytes"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// hexed writes text as strace -xx does.
func hexed(text string) string {
	var b strings.Builder
	for _, c := range []byte(text) {
		fmt.Fprintf(&b, `\x%02x`, c)
	}
	return b.String()
}

// TestTraceIsRead reads a made-up trace with what strace does to it: calls of
// one thread cut in two by those of another, failures, calls of no concern.
func TestTraceIsRead(t *testing.T) {
	file := hexed("/d/a.db")
	trace := strings.Join([]string{
		`7  openat(AT_FDCWD<` + hexed("/x") + `>, "` + file + `", O_RDWR|O_CREAT|O_CLOEXEC, 0600) = 5<` + file + `>`,
		`7  pwrite64(5<` + file + `>, "` + hexed("abc") + `", 3, 4096 <unfinished ...>`,
		`8  write(9<TCP:[127.0.0.1:1->127.0.0.1:2]>, "` + hexed("yes") + `", 3) = 3`,
		`7  <... pwrite64 resumed>)            = 3`,
		`8  pwrite64(5<` + file + `>, "` + hexed("abc") + `", 3, 0) = -1 ENOSPC (No space left on device)`,
		`8  write(2</dev/null>, "` + hexed("log") + `", 3) = 3`,
		`7  fdatasync(5<` + file + `>) = 0`,
		`7  renameat(AT_FDCWD<` + hexed("/x") + `>, "` + file + `", AT_FDCWD<` + hexed("/x") + `>, "` + hexed("/d/b.db") + `") = 0`,
		`7  --- SIGURG {si_signo=SIGURG, si_code=SI_TKILL} ---`,
		`8  pwrite64(5<` + hexed("/d/b.db") + `>, "` + hexed("z") + `", 1, 0 <unfinished ...>`,
		`7  +++ exited with 0 +++`,
	}, "\n")
	events, err := parseTrace(strings.NewReader(trace), "/d")
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, e := range events {
		got = append(got, fmt.Sprintf("%d %d-%d %s %s %d %q", e.kind, e.begun, min(e.ended, 99), e.path, e.target, e.offset, e.data))
	}
	want := []string{
		fmt.Sprintf(`%d 1-1 /d/a.db  0 ""`, eventCreate),
		fmt.Sprintf(`%d 3-3 :[127.0.0.1:1->127.0.0.1:2]  0 "yes"`, eventAnswer),
		fmt.Sprintf(`%d 2-4 /d/a.db  4096 "abc"`, eventWrite),
		fmt.Sprintf(`%d 7-7 /d/a.db  0 ""`, eventSync),
		fmt.Sprintf(`%d 8-8 /d/a.db /d/b.db 0 ""`, eventRename),
		fmt.Sprintf(`%d 10-99 /d/b.db  0 "z"`, eventWrite),
	}
	if g, w := strings.Join(got, "\n"), strings.Join(want, "\n"); g != w {
		t.Errorf("got\n%s\nwant\n%s", g, w)
	}
	if _, err := parseTrace(strings.NewReader(`7  fallocate(5<`+file+`>, 0, 0, 10) = 0`), "/d"); err == nil {
		t.Error("a call that changes the file in a way that isn't modelled passes unseen")
	}
}

// TestDiskKeepsWhatSyncsCover draws many images of a short history and looks
// at which contents of the file appear.
func TestDiskKeepsWhatSyncsCover(t *testing.T) {
	const path = "/d/a.db"
	write := func(line int, text string) event {
		return event{kind: eventWrite, begun: line, ended: line, path: path, data: []byte(text)}
	}
	create := event{kind: eventCreate, begun: 1, ended: 1, path: path}
	syncFile := event{kind: eventSync, begun: 3, ended: 3, path: path}
	syncNames := event{kind: eventSync, begun: 4, ended: 4, path: "/d"}
	for _, tt := range []struct {
		name   string
		events []event
		want   []string // contents that must appear; "-" means no file
		why    string
	}{
		{"nothing synced", []event{create, write(2, "aaaa")}, []string{"-", "", "aaaa"}, "name and content are both open"},
		{"content synced", []event{create, write(2, "aaaa"), syncFile}, []string{"-", "aaaa"}, "the name is still open"},
		{"all synced", []event{create, write(2, "aaaa"), syncFile, syncNames}, []string{"aaaa"}, "a sync that returned is a promise"},
		{"overwritten", []event{create, write(2, "aaaa"), syncFile, syncNames, write(5, "bbbb")}, []string{"aaaa", "bbbb"}, "a later write may or may not be there"},
		{
			"sync overlaps the write",
			[]event{create, syncNames, {kind: eventWrite, begun: 5, ended: 8, path: path, data: []byte("cccc")}, {kind: eventSync, begun: 6, ended: 7, path: path}},
			[]string{"", "cccc"}, "a sync covers only what had returned when it began",
		},
	} {
		t.Run(tt.name, func(t *testing.T) {
			random := newRandom(t)
			d := newDisk("/d")
			for _, e := range tt.events {
				d.begin(e)
				d.end(e)
			}
			seen := map[string]bool{}
			for range 200 {
				seen[imageContent(t, d, random)] = true
			}
			for _, want := range tt.want {
				if !seen[want] {
					t.Errorf("content %q never appears, although %s", want, tt.why)
				}
				delete(seen, want)
			}
			for content := range seen {
				t.Errorf("content %q appears, although %s", content, tt.why)
			}
		})
	}
}

func imageContent(t *testing.T, d *disk, random *rand.Rand) string {
	t.Helper()
	dir := t.TempDir()
	if err := d.image(dir, random); err != nil {
		t.Fatal(err)
	}
	content, err := os.ReadFile(filepath.Join(dir, "a.db"))
	if os.IsNotExist(err) {
		return "-"
	}
	if err != nil {
		t.Fatal(err)
	}
	return string(content)
}

// TestDiskTearsWritesIntoSectors wants images in which part of one write is
// there and part is not.
func TestDiskTearsWritesIntoSectors(t *testing.T) {
	random := newRandom(t)
	f := &diskFile{pages: map[int64][]byte{}, pending: []event{
		{kind: eventWrite, offset: 256, data: bytes.Repeat([]byte("x"), 3*pageSize)},
	}}
	torn := 0
	for range 100 {
		for _, survive := range survivors(random)[3:] {
			after := f.after(survive)
			kept := 0
			for _, page := range after.pages {
				kept += bytes.Count(page, []byte("x"))
			}
			if kept > 0 && kept < 3*pageSize {
				torn++
			}
		}
	}
	if torn < 100 {
		t.Errorf("%d of 200 images are torn, want at least half", torn)
	}
	if len(f.pages) != 0 || f.size != 0 {
		t.Error("making an image changed the file")
	}
}
