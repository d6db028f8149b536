package main

import (
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
)

const (
	pageSize   = 4096
	sectorSize = 512
)

// disk models what a file system promises of the names and files below one
// directory, and no more: what a sync covered is kept; of the rest a power
// loss keeps any part, in units of sectors; changes of names become durable
// with a sync of their directory, and before that in their order.
type disk struct {
	root  string
	names map[string]*diskFile // as the processes see them
	kept  map[string]*diskFile // as they are surely found after a power loss
	moves []move               // what leads from kept to names
}

// diskFile is a file, or a directory, which has no content here.
type diskFile struct {
	directory bool
	size      int64 // durable
	pages     map[int64][]byte
	pending   []event // writes and truncations that no sync covers
}

// move is a change of names: path comes to mean file (nil: nothing), and from,
// if not empty, ceases to mean anything.
type move struct {
	path  string
	from  string
	file  *diskFile
	ended int // line of the trace
}

func (m move) apply(names map[string]*diskFile) {
	if m.from != "" {
		delete(names, m.from)
	}
	if m.file == nil {
		delete(names, m.path)
		return
	}
	names[m.path] = m.file
}

func newDisk(root string) *disk {
	return &disk{root: root, names: map[string]*diskFile{}, kept: map[string]*diskFile{}}
}

// begin takes the start of a call into account: a write that has begun may
// leave traces.
func (d *disk) begin(e event) {
	switch e.kind {
	case eventWrite, eventTruncate:
		if f := d.names[e.path]; f != nil {
			f.pending = append(f.pending, e)
		}
	case eventCreate, eventMakeDirectory:
		if d.names[e.path] == nil {
			file := &diskFile{directory: e.kind == eventMakeDirectory, pages: map[int64][]byte{}}
			d.move(move{path: e.path, file: file, ended: e.ended})
		}
	case eventRename:
		d.move(move{path: e.target, from: e.path, file: d.names[e.path], ended: e.ended})
	case eventLink:
		d.move(move{path: e.target, file: d.names[e.path], ended: e.ended})
	case eventRemove:
		d.move(move{path: e.path, ended: e.ended})
	}
}

func (d *disk) move(m move) {
	m.apply(d.names)
	d.moves = append(d.moves, m)
}

// end takes the return of a call into account: a sync that has returned covers
// what had returned before it began.
func (d *disk) end(e event) {
	if e.kind != eventSync {
		return
	}
	if f := d.names[e.path]; f != nil {
		f.settle(e.begun)
	}
	d.moves = slices.DeleteFunc(d.moves, func(m move) bool {
		covered := filepath.Dir(m.path) == e.path && m.ended < e.begun
		if covered {
			m.apply(d.kept)
		}
		return covered
	})
}

// settle makes durable what had returned before the given line.
func (f *diskFile) settle(line int) {
	f.pending = slices.DeleteFunc(f.pending, func(e event) bool {
		if e.ended >= line {
			return false
		}
		f.apply(e)
		return true
	})
}

func (f *diskFile) apply(e event) {
	if e.kind == eventTruncate {
		f.truncate(e.size)
		return
	}
	f.write(e.offset, e.data)
}

func (f *diskFile) truncate(size int64) {
	for n := range f.pages {
		if n*pageSize >= size {
			delete(f.pages, n)
		}
	}
	if tail := size % pageSize; tail != 0 && f.pages[size/pageSize] != nil {
		page := slices.Clone(f.pages[size/pageSize])
		clear(page[tail:])
		f.pages[size/pageSize] = page
	}
	f.size = size
}

// write never changes a page in place, so that copies can share pages.
func (f *diskFile) write(offset int64, data []byte) {
	f.size = max(f.size, offset+int64(len(data)))
	for len(data) > 0 {
		n, at := offset/pageSize, offset%pageSize
		page := make([]byte, pageSize)
		copy(page, f.pages[n])
		done := copy(page[at:], data)
		f.pages[n] = page
		offset, data = offset+int64(done), data[done:]
	}
}

// survivor is what an unsynced change leaves behind in one image.
type survivor func(e event) []event

// survivors are the ways in which an image treats unsynced changes: drop all,
// keep all, keep some whole, keep some pages, keep some sectors.
func survivors(random *rand.Rand) []survivor {
	coin := func() bool { return random.IntN(2) == 0 }
	return []survivor{
		func(event) []event { return nil },
		func(e event) []event { return []event{e} },
		func(e event) []event {
			if coin() {
				return nil
			}
			return []event{e}
		},
		func(e event) []event { return e.pieces(pageSize, coin) },
		func(e event) []event { return e.pieces(sectorSize, coin) },
	}
}

// pieces returns those parts of a write, in units of unit bytes, for which keep
// says so. A truncation has one part.
func (e event) pieces(unit int64, keep func() bool) []event {
	if e.kind == eventTruncate {
		if keep() {
			return []event{e}
		}
		return nil
	}
	var parts []event
	for offset, data := e.offset, e.data; len(data) > 0; {
		n := min(int64(len(data)), unit-offset%unit)
		if keep() {
			parts = append(parts, event{kind: eventWrite, offset: offset, data: data[:n]})
		}
		offset, data = offset+n, data[n:]
	}
	return parts
}

// image writes to dir what a power loss at this moment may leave below root.
func (d *disk) image(dir string, random *rand.Rand) error {
	names := maps.Clone(d.kept)
	for _, m := range d.moves[:random.IntN(len(d.moves)+1)] {
		m.apply(names)
	}
	ways := survivors(random)
	survive := ways[random.IntN(len(ways))]
	for _, path := range slices.Sorted(maps.Keys(names)) {
		target := filepath.Join(dir, strings.TrimPrefix(path, d.root))
		if err := os.MkdirAll(filepath.Dir(target), 0o700); err != nil {
			return err
		}
		if names[path].directory {
			if err := os.MkdirAll(target, 0o700); err != nil {
				return err
			}
			continue
		}
		if err := names[path].after(survive).store(target); err != nil {
			return err
		}
	}
	return nil
}

// after returns the file after a power loss.
func (f *diskFile) after(survive survivor) *diskFile {
	out := &diskFile{size: f.size, pages: maps.Clone(f.pages)}
	for _, e := range f.pending {
		for _, part := range survive(e) {
			out.apply(part)
		}
	}
	return out
}

func (f *diskFile) store(path string) error {
	out, err := os.Create(path)
	if err != nil {
		return err
	}
	defer out.Close()
	if err := out.Truncate(f.size); err != nil {
		return err
	}
	for n, page := range f.pages {
		length := min(pageSize, f.size-n*pageSize)
		if _, err := out.WriteAt(page[:length], n*pageSize); err != nil {
			return err
		}
	}
	return nil
}
