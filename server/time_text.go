package server

import (
	"bytes"
	"strconv"
	"strings"
	"time"

	"google.golang.org/protobuf/types/known/durationpb"
)

// parseTime reads an RFC 3339 time as protobuf's JSON has it: upper-case T and
// Z, at most nine decimals, years 1 to 9999 in UTC.
func parseTime(text []byte) (time.Time, bool) {
	var t time.Time
	if !wellFormedTime(text) || t.UnmarshalText(text) != nil {
		return time.Time{}, false
	}
	t = t.UTC()
	if year := t.Year(); year < 1 || year > 9999 {
		return time.Time{}, false
	}
	return t, true
}

// wellFormedTime refuses what package time tolerates though RFC 3339 doesn't:
// an hour of one digit, a decimal comma, an offset beyond 23:59; and more
// decimals than nanoseconds.
func wellFormedTime(text []byte) bool {
	const whole = len("2006-01-02T15:04:05")
	if len(text) <= whole || text[13] != ':' || text[16] != ':' {
		return false
	}
	rest := text[whole:]
	if rest[0] == '.' {
		digits := bytes.IndexAny(rest, "Z+-") - 1
		if digits < 1 || digits > 9 {
			return false
		}
		rest = rest[1+digits:]
	}
	if len(rest) == len("+23:59") && (rest[0] == '+' || rest[0] == '-') {
		return string(rest[1:3]) <= "23" && string(rest[4:6]) <= "59"
	}
	return string(rest) == "Z"
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

// appendDuration writes the seconds of d, at least 0, as protobuf's JSON does: with
// 0, 3, 6 or 9 decimals.
func appendDuration(b []byte, d *durationpb.Duration) []byte {
	b = strconv.AppendInt(b, d.GetSeconds(), 10)
	decimals := strconv.Itoa(1e9 + int(d.GetNanos()))[1:]
	for range 3 {
		shorter, ok := strings.CutSuffix(decimals, "000")
		if !ok {
			break
		}
		decimals = shorter
	}
	if decimals == "" {
		return b
	}
	return append(append(b, '.'), decimals...)
}
