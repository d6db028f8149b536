package main

import (
	"bufio"
	"encoding/hex"
	"fmt"
	"io"
	"math"
	"path/filepath"
	"strconv"
	"strings"
)

// tracedCalls are the system calls by which a process changes files, names or
// says something. Those that parseTrace can't follow are an error when they
// touch the data directory, so that a new way of writing doesn't go unseen.
const tracedCalls = "openat,creat,open,write,pwrite64,writev,pwritev,pwritev2,sendto,sendmsg,fsync,fdatasync,sync_file_range," +
	"ftruncate,truncate,fallocate,rename,renameat,renameat2,link,linkat,unlink,unlinkat,mkdir,mkdirat,msync,copy_file_range,sendfile,splice"

type eventKind int

const (
	eventWrite eventKind = iota + 1
	eventTruncate
	eventSync // of a file or a directory
	eventCreate
	eventMakeDirectory
	eventRename
	eventLink
	eventRemove
	eventAnswer // bytes sent on a socket
)

// event is one system call. Lines of the trace are its clock: the call had no
// effect before line begun and its full effect from line ended on.
type event struct {
	kind   eventKind
	begun  int
	ended  int
	path   string // of a file or directory; of a socket, its two addresses
	target string // of a rename or a link
	offset int64
	size   int64 // to which a file is cut
	data   []byte
}

// parseTrace reads what strace -f -yy -xx wrote, and keeps the calls that
// concern names at or below root, and sockets.
func parseTrace(r io.Reader, root string) ([]event, error) {
	type half struct {
		text string
		line int
	}
	var events []event
	open := map[string]half{}
	line := 0
	keep := func(text string, begun, ended int) error {
		e, err := parseCall(text, root)
		if err != nil {
			return fmt.Errorf("trace line %d: %w", begun, err)
		}
		if e != nil {
			e.begun, e.ended = begun, ended
			events = append(events, *e)
		}
		return nil
	}
	lines := bufio.NewScanner(r)
	lines.Buffer(nil, math.MaxInt32)
	for lines.Scan() {
		line++
		pid, text, _ := strings.Cut(lines.Text(), " ")
		text = strings.TrimSpace(text)
		begun := line
		if start, ok := strings.CutSuffix(text, "<unfinished ...>"); ok {
			open[pid] = half{strings.TrimSpace(start), line}
			continue
		}
		if strings.HasPrefix(text, "<... ") {
			_, rest, _ := strings.Cut(text, "resumed>")
			text, begun = open[pid].text+rest, open[pid].line
			delete(open, pid)
		}
		if strings.HasPrefix(text, "+++") || strings.HasPrefix(text, "---") {
			continue
		}
		if err := keep(text, begun, line); err != nil {
			return nil, err
		}
	}
	for _, h := range open {
		if err := keep(h.text+") = ?", h.line, math.MaxInt); err != nil {
			return nil, err
		}
	}
	return events, lines.Err()
}

// parseCall parses one call, such as
//
//	pwrite64(7</data/leadline.db>, "\x00\x01", 2, 4096) = 2
//
// with paths in hexadecimal too. It returns nil for calls that are of no
// concern or failed. A call that never returned counts as begun.
func parseCall(text, root string) (*event, error) {
	name, rest, ok := strings.Cut(text, "(")
	if !ok {
		return nil, nil
	}
	end := strings.LastIndex(rest, ") ")
	equals := strings.LastIndex(rest, "= ")
	if end < 0 || equals < end {
		return nil, fmt.Errorf("no result in %.200q", text)
	}
	args, result := splitArguments(rest[:end]), rest[equals+2:]
	if strings.HasPrefix(result, "-1 ") {
		return nil, nil
	}
	switch name {
	case "write", "writev", "sendto", "sendmsg":
		if socket, ok := strings.CutPrefix(descriptor(args[0]), "TCP"); ok {
			data, err := quoted(strings.Join(args[1:], ","))
			return &event{kind: eventAnswer, path: socket, data: data}, err
		}
	}
	concerned := false
	for _, a := range append(args, result) {
		concerned = concerned || within(root, descriptor(a)) || within(root, quotedPath(a))
	}
	if !concerned {
		return nil, nil
	}
	return parseFileCall(name, args, result)
}

func parseFileCall(name string, args []string, result string) (*event, error) {
	switch name {
	case "pwrite64":
		data, err := quoted(args[1])
		if err != nil {
			return nil, err
		}
		if n, err := strconv.Atoi(result); err == nil {
			data = data[:n]
		}
		offset, err := strconv.ParseInt(args[3], 10, 64)
		return &event{kind: eventWrite, path: descriptor(args[0]), offset: offset, data: data}, err
	case "ftruncate":
		size, err := strconv.ParseInt(args[1], 10, 64)
		return &event{kind: eventTruncate, path: descriptor(args[0]), size: size}, err
	case "fsync", "fdatasync":
		return &event{kind: eventSync, path: descriptor(args[0])}, nil
	case "openat":
		if strings.Contains(args[2], "SYNC") || strings.Contains(args[2], "O_TRUNC") && !strings.Contains(args[2], "O_CREAT") {
			return nil, fmt.Errorf("openat with %s is not modelled", args[2])
		}
		if strings.Contains(args[2], "O_CREAT") {
			return &event{kind: eventCreate, path: descriptor(result)}, nil
		}
		return nil, nil
	case "mkdirat":
		return &event{kind: eventMakeDirectory, path: quotedPath(args[1])}, nil
	case "renameat", "renameat2":
		return &event{kind: eventRename, path: quotedPath(args[1]), target: quotedPath(args[3])}, nil
	case "linkat":
		return &event{kind: eventLink, path: quotedPath(args[1]), target: quotedPath(args[3])}, nil
	case "unlinkat":
		return &event{kind: eventRemove, path: quotedPath(args[1])}, nil
	}
	return nil, fmt.Errorf("%s on the data directory is not modelled", name)
}

// splitArguments splits at the commas outside of brackets and braces.
func splitArguments(text string) []string {
	var args []string
	depth, from := 0, 0
	for i, c := range text {
		switch c {
		case '[', '{':
			depth++
		case ']', '}':
			depth--
		case ',':
			if depth == 0 {
				args = append(args, strings.TrimSpace(text[from:i]))
				from = i + 1
			}
		}
	}
	return append(args, strings.TrimSpace(text[from:]))
}

// descriptor returns what strace says a file descriptor is open on.
func descriptor(arg string) string {
	_, rest, ok := strings.Cut(arg, "<")
	if !ok || strings.HasPrefix(arg, `"`) {
		return ""
	}
	rest = strings.TrimSuffix(rest, ">")
	if path, err := unescape(rest); err == nil {
		return string(path)
	}
	return rest
}

func quotedPath(arg string) string {
	if !strings.HasPrefix(arg, `"`) {
		return ""
	}
	path, err := quoted(arg)
	if err != nil {
		return ""
	}
	return string(path)
}

// quoted decodes and joins all strings in text.
func quoted(text string) ([]byte, error) {
	var all []byte
	for {
		_, rest, ok := strings.Cut(text, `"`)
		if !ok {
			return all, nil
		}
		inside, after, ok := strings.Cut(rest, `"`)
		if !ok || strings.HasPrefix(after, "...") {
			return nil, fmt.Errorf("a string is cut off in %.100q", text)
		}
		data, err := unescape(inside)
		if err != nil {
			return nil, err
		}
		all = append(all, data...)
		text = after
	}
}

// unescape decodes \x00\x01...
func unescape(text string) ([]byte, error) {
	return hex.DecodeString(strings.ReplaceAll(text, `\x`, ""))
}

// within tells whether path is root or lies below it.
func within(root, path string) bool {
	if !filepath.IsAbs(path) {
		return false
	}
	return path == root || strings.HasPrefix(path, root+string(filepath.Separator))
}
