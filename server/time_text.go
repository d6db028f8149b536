package server

import (
	"bytes"
	"time"
)

// parseTime reads an RFC 3339 time as protobuf's JSON has it: upper-case T and
// Z, at most nine decimals, years 1 to 9999 in UTC.
func parseTime(text []byte) (time.Time, bool) {
	var t time.Time
	if err := t.UnmarshalText(text); err != nil {
		return time.Time{}, false
	}
	if dot := bytes.IndexByte(text, '.'); dot >= 0 {
		if digits := bytes.IndexAny(text[dot:], "Z+-") - 1; digits > 9 {
			return time.Time{}, false
		}
	}
	t = t.UTC()
	if year := t.Year(); year < 1 || year > 9999 {
		return time.Time{}, false
	}
	return t, true
}

// appendTime writes t as protobuf's JSON does: UTC, with 0, 3, 6 or 9 decimals.
func appendTime(b []byte, t time.Time) []byte {
	t = t.UTC()
	layout := "2006-01-02T15:04:05.000000000Z"
	switch n := t.Nanosecond(); {
	case n == 0:
		layout = "2006-01-02T15:04:05Z"
	case n%1e6 == 0:
		layout = "2006-01-02T15:04:05.000Z"
	case n%1e3 == 0:
		layout = "2006-01-02T15:04:05.000000Z"
	}
	return t.AppendFormat(b, layout)
}
