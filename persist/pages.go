package persist

import (
	"bytes"
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"os"
)

// The page structure of a bbolt file (its format version 2), as far as it is
// needed to tell whether every page is where it belongs. bbolt believes what it
// finds in a page; on a damaged file its cursors and its own Tx.Check can end
// the process or never end. What is here reads the file, not the mapping, and
// believes nothing.
const (
	pageHeader  = 16 // id 8, flags 2, count 2, overflow 4
	pageElement = 16

	branchPage   = 0x01
	leafPage     = 0x02
	metaPage     = 0x04
	freelistPage = 0x10

	bucketElement = 0x01 // flag of a leaf element that holds a bucket

	metaMagic = 0xED0CDAED
	metaBytes = 64 // magic 4, version 4, page size 4, flags 4, root 8, sequence 8, freelist 8, pages 8, transaction 8, checksum 8

	noFreelist  = ^uint64(0)
	maxRunBytes = 256 << 20 // of a page with its overflow
)

// meta is one of the two pages that say where all else is.
type meta struct {
	pageSize                           int
	root, freelist, pages, transaction uint64
}

// readMeta reads the meta page at an offset.
func readMeta(f io.ReaderAt, offset int64) (m meta, err error) {
	b := make([]byte, pageHeader+metaBytes)
	if _, err := f.ReadAt(b, offset); err != nil {
		return m, err
	}
	if flags := binary.LittleEndian.Uint16(b[8:]); flags != metaPage {
		return m, fmt.Errorf("its flags are %#x", flags)
	}
	b = b[pageHeader:]
	if binary.LittleEndian.Uint32(b) != metaMagic || binary.LittleEndian.Uint64(b[metaBytes-8:]) != fnv1a(b[:metaBytes-8]) {
		return m, errors.New("its checksum doesn't match")
	}
	m = meta{
		pageSize: int(binary.LittleEndian.Uint32(b[8:])),
		root:     binary.LittleEndian.Uint64(b[16:]), freelist: binary.LittleEndian.Uint64(b[32:]),
		pages: binary.LittleEndian.Uint64(b[40:]), transaction: binary.LittleEndian.Uint64(b[48:]),
	}
	return m, nil
}

// fnv1a is the 64-bit FNV-1a hash, by which bbolt sums its meta pages (Fowler,
// Noll, Vo; constants of the IETF draft draft-eastlake-fnv, from memory).
func fnv1a(b []byte) uint64 {
	h := uint64(14695981039346656037)
	for _, c := range b {
		h = (h ^ uint64(c)) * 1099511628211
	}
	return h
}

// readMetas reads both meta pages and returns the newer one. One that isn't
// sound is damage, though bbolt would go by the other: that could be a group
// older. A power loss leaves both sound, see Premise in doc.go.
func readMetas(f *os.File, pageSize int) (meta, error) {
	first, err := readMeta(f, 0)
	if err != nil {
		return meta{}, fmt.Errorf("%w: meta page 0: %w", ErrDamaged, err)
	}
	second, err := readMeta(f, int64(pageSize))
	if err != nil {
		return meta{}, fmt.Errorf("%w: meta page 1: %w", ErrDamaged, err)
	}
	if first.pageSize != pageSize || second.pageSize != pageSize {
		return meta{}, fmt.Errorf("%w: the page size is %d and %d", ErrDamaged, first.pageSize, second.pageSize)
	}
	if second.transaction > first.transaction {
		first = second
	}
	info, err := f.Stat()
	if err != nil {
		return meta{}, err
	}
	if first.pages < 4 || first.pages > uint64(info.Size())/uint64(pageSize) {
		return meta{}, fmt.Errorf("%w: the file has %d bytes for %d pages of %d", ErrDamaged, info.Size(), first.pages, pageSize)
	}
	return first, nil
}

// pageCheck walks the pages.
type pageCheck struct {
	file    io.ReaderAt
	meta    meta
	used    []bool
	shallow bool // leaves below a branch page are only counted, all but one
	report  func(error)
	visit   func(bucket string, key, value []byte) // of every bucket, without key, and then its elements
}

// checkBranches reports pages that would lead a cursor astray, or that would be
// written over: it reads the branch pages, about one in a hundred, and the list
// of free ones.
func checkBranches(f io.ReaderAt, m meta) error {
	var first error
	c := newPageCheck(f, m, func(err error) { first = cmp.Or(first, err) })
	c.shallow = true
	c.walk(m.root, nil, nil, "")
	c.freelist()
	return first
}

// checkPages reports every page that isn't where it belongs, and hands out the
// elements of those that are.
func checkPages(f io.ReaderAt, m meta, report func(error), visit func(bucket string, key, value []byte)) {
	c := newPageCheck(f, m, report)
	c.visit = visit
	c.walk(m.root, nil, nil, "")
	c.freelist()
	for id, used := range c.used {
		if !used && m.freelist != noFreelist {
			c.damage(uint64(id), "nothing refers to it")
		}
	}
}

func newPageCheck(f io.ReaderAt, m meta, report func(error)) *pageCheck {
	c := &pageCheck{file: f, meta: m, used: make([]bool, m.pages), report: report}
	c.used[0], c.used[1] = true, true
	c.visit = func(string, []byte, []byte) {}
	return c
}

func (c *pageCheck) damage(id uint64, format string, args ...any) {
	c.report(fmt.Errorf("%w: page %d: %w", ErrDamaged, id, fmt.Errorf(format, args...)))
}

// mark notes that a page is used, if it can be.
func (c *pageCheck) mark(id uint64) bool {
	if id >= c.meta.pages {
		c.damage(id, "the file has only %d pages", c.meta.pages)
		return false
	}
	if c.used[id] {
		c.damage(id, "it is used twice")
		return false
	}
	c.used[id] = true
	return true
}

// take reads a page with its overflow, if it is one of those kinds and used
// nowhere else.
func (c *pageCheck) take(id uint64, kinds uint16) (page []byte, ok bool) {
	if !c.mark(id) {
		return nil, false
	}
	head := make([]byte, pageHeader)
	if _, err := c.file.ReadAt(head, int64(id)*int64(c.meta.pageSize)); err != nil {
		c.damage(id, "%w", err)
		return nil, false
	}
	flags, overflow := binary.LittleEndian.Uint16(head[8:]), uint64(binary.LittleEndian.Uint32(head[12:]))
	if got := binary.LittleEndian.Uint64(head); got != id || flags&kinds == 0 || flags&(flags-1) != 0 {
		c.damage(id, "it says that it is page %d with flags %#x", got, flags)
		return nil, false
	}
	if id+overflow >= c.meta.pages || (overflow+1)*uint64(c.meta.pageSize) > maxRunBytes {
		c.damage(id, "it claims %d pages of overflow", overflow)
		return nil, false
	}
	for i := id + 1; i <= id+overflow; i++ {
		if !c.mark(i) {
			return nil, false
		}
	}
	page = make([]byte, (overflow+1)*uint64(c.meta.pageSize))
	if _, err := c.file.ReadAt(page, int64(id)*int64(c.meta.pageSize)); err != nil {
		c.damage(id, "%w", err)
		return nil, false
	}
	return page, true
}

// walk checks a page and what is below it, and tells whether it is a leaf. Its
// keys are to be from low on and below high, where these aren't nil.
func (c *pageCheck) walk(id uint64, low, high []byte, bucket string) (leaf bool) {
	b, ok := c.take(id, branchPage|leafPage)
	if !ok {
		return false
	}
	p := page{id: id, bytes: b, low: low, high: high, bucket: bucket}
	if p.isBranch() {
		c.branch(p)
		return false
	}
	c.leaf(p)
	return true
}

// page is one with its overflow, or one that lies within a value.
type page struct {
	id        uint64
	bytes     []byte
	low, high []byte
	bucket    string
}

func (p *page) isBranch() bool { return binary.LittleEndian.Uint16(p.bytes[8:]) == branchPage }
func (p *page) count() int     { return int(binary.LittleEndian.Uint16(p.bytes[10:])) }

// element is one of a page: of a leaf with a value, of a branch with a child.
type element struct {
	key, value []byte
	flags      uint32
	child      uint64
}

// elements reads those of a page up to the first that isn't sound.
func (c *pageCheck) elements(p page) []element {
	end := pageHeader + p.count()*pageElement
	if end > len(p.bytes) {
		c.damage(p.id, "it can't have %d elements", p.count())
		return nil
	}
	found := make([]element, 0, p.count())
	for i := range p.count() {
		e, next := p.element(i, end)
		if next < 0 {
			c.damage(p.id, "element %d isn't where it belongs", i)
			return found
		}
		if i > 0 && bytes.Compare(found[i-1].key, e.key) >= 0 || p.low != nil && bytes.Compare(e.key, p.low) < 0 ||
			p.high != nil && bytes.Compare(e.key, p.high) >= 0 {
			c.damage(p.id, "element %d is out of order", i)
			return found
		}
		found, end = append(found, e), next
	}
	within := p.id == 0
	if within && end != len(p.bytes) || !within && (end-1)/c.meta.pageSize != (len(p.bytes)-1)/c.meta.pageSize {
		c.damage(p.id, "it has %d bytes, not %d", len(p.bytes), end)
	}
	return found
}

// element returns the ith, which is to begin its data at an offset, and where
// that ends; or -1.
func (p *page) element(i, from int) (e element, end int) {
	at := pageHeader + i*pageElement
	b := p.bytes[at:]
	var pos, keyBytes, valueBytes uint32
	if p.isBranch() {
		pos, keyBytes, e.child = binary.LittleEndian.Uint32(b), binary.LittleEndian.Uint32(b[4:]), binary.LittleEndian.Uint64(b[8:])
	} else {
		e.flags, pos = binary.LittleEndian.Uint32(b), binary.LittleEndian.Uint32(b[4:])
		keyBytes, valueBytes = binary.LittleEndian.Uint32(b[8:]), binary.LittleEndian.Uint32(b[12:])
	}
	if int64(at)+int64(pos) != int64(from) || int64(from)+int64(keyBytes)+int64(valueBytes) > int64(len(p.bytes)) {
		return e, -1
	}
	middle := from + int(keyBytes)
	end = middle + int(valueBytes)
	e.key, e.value = p.bytes[from:middle], p.bytes[middle:end]
	return e, end
}

func (c *pageCheck) branch(p page) {
	elements := c.elements(p)
	if len(elements) == 0 {
		c.damage(p.id, "a branch page leads nowhere")
	}
	leaves := false
	for i, e := range elements {
		high := p.high
		if i+1 < len(elements) {
			high = elements[i+1].key
		}
		if c.shallow && leaves {
			c.mark(e.child)
			continue
		}
		leaves = c.walk(e.child, e.key, high, p.bucket)
	}
}

func (c *pageCheck) leaf(p page) {
	for i, e := range c.elements(p) {
		switch e.flags {
		case 0:
			c.visit(p.bucket, e.key, e.value)
		case bucketElement:
			c.within(p, string(e.key), e.value)
		default:
			c.damage(p.id, "element %d has flags %#x", i, e.flags)
		}
	}
}

// within checks the bucket that a leaf element holds: its root page, or its
// only page itself.
func (c *pageCheck) within(p page, name string, value []byte) {
	const header = 16 // root page and sequence
	if len(value) < header {
		c.damage(p.id, "the bucket %s has %d bytes", name, len(value))
		return
	}
	c.visit(name, nil, nil)
	if root := binary.LittleEndian.Uint64(value); root != 0 {
		c.walk(root, nil, nil, name)
		return
	}
	inner := page{bytes: value[header:], bucket: name}
	if len(inner.bytes) < pageHeader || binary.LittleEndian.Uint16(inner.bytes[8:]) != leafPage {
		c.damage(p.id, "the bucket %s is no leaf", name)
		return
	}
	c.leaf(inner)
}

// freelist checks that free pages are free.
func (c *pageCheck) freelist() {
	if c.meta.freelist == noFreelist {
		return
	}
	page, ok := c.take(c.meta.freelist, freelistPage)
	if !ok {
		return
	}
	id, count, ids := c.meta.freelist, uint64(binary.LittleEndian.Uint16(page[10:])), page[pageHeader:]
	if count == 0xFFFF {
		count, ids = binary.LittleEndian.Uint64(ids), ids[8:]
	}
	if count > uint64(len(ids)/8) {
		c.damage(id, "it can't list %d pages", count)
		return
	}
	for i := range count {
		switch free := binary.LittleEndian.Uint64(ids[8*i:]); {
		case free >= c.meta.pages:
			c.damage(id, "it lists page %d of %d", free, c.meta.pages)
		case c.used[free]:
			c.damage(free, "it is in use and listed as free")
		default:
			c.used[free] = true
		}
	}
}
