package engine

import (
	"strings"
	"unicode"
	"unicode/utf8"
)

// Limits of the interface.
const (
	MaxIDBytes          = 255
	MaxReadingIDBytes   = 128
	MaxUnitBytes        = 32
	MaxDescriptionBytes = 512
	MaxBatchReadings    = 10_000
)

// CheckID checks the form of a quantity's or instrument's ID, which is that of
// a SenML name (RFC 8428, 4.5.1): [A-Za-z0-9][A-Za-z0-9\-:./_]{0,254}, in
// which no segment between slashes is empty, "." or "..". field names the
// place it came from.
func CheckID(field, id string) error {
	if !wellFormedID(id) {
		return refuse(InvalidID, field, "%s %.80q is not an ID; use 1 to 255 of the characters A-Z a-z 0-9 - : . / _ beginning with a letter or digit, no empty, . or .. between slashes", field, id)
	}
	return nil
}

func wellFormedID(id string) bool {
	if id == "" || len(id) > MaxIDBytes || !alphanumeric(id[0]) {
		return false
	}
	for i := range len(id) {
		if c := id[i]; !alphanumeric(c) && !strings.ContainsRune("-:./_", rune(c)) {
			return false
		}
	}
	for segment := range strings.SplitSeq(id, "/") {
		if segment == "" || segment == "." || segment == ".." {
			return false
		}
	}
	return true
}

func alphanumeric(c byte) bool {
	return 'a' <= c && c <= 'z' || 'A' <= c && c <= 'Z' || '0' <= c && c <= '9'
}

// printable tells whether s is valid UTF-8 without control characters.
func printable(s string) bool {
	return utf8.ValidString(s) && strings.IndexFunc(s, func(r rune) bool { return !unicode.IsPrint(r) }) < 0
}
