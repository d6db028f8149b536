package server

import (
	"math"
	"math/bits"
	"strconv"
	"unicode/utf8"

	"github.com/go-json-experiment/json/jsontext"

	"leadline.example/engine"
)

// scanner reads bodies of readings in their plain shape: known fields, strings
// without escapes, no null, nothing missing, nothing over a limit. It gives up
// on anything else, without saying why; the strict decoder then accepts or
// explains. So it must never accept what the strict decoder refuses, nor read
// it differently.
type scanner struct {
	b    []byte
	i    int
	last engine.Reading // the one before: its strings are often those of the next
}

// scanReadings scans the body of a batch.
func scanReadings(body []byte) ([]engine.Reading, bool) {
	s := scanner{b: body}
	if !s.token('{') || !s.key("readings") || !s.token('[') {
		return nil, false
	}
	// A reading with an ID and a time takes about 150 bytes.
	readings := make([]engine.Reading, 0, min(len(body)/100+1, engine.MaxBatchReadings))
	for {
		r, ok := s.reading()
		if !ok || r.Quantity == "" || len(readings) == engine.MaxBatchReadings {
			return nil, false
		}
		readings = append(readings, r)
		s.last = r
		if s.token(',') {
			continue
		}
		return readings, s.token(']') && s.token('}') && s.end()
	}
}

// scanReading scans the body of a single reading.
func scanReading(quantity string, body []byte) (engine.Reading, bool) {
	s := scanner{b: body}
	r, ok := s.reading()
	if !ok || !s.end() || r.Quantity != "" && string(r.Quantity) != quantity {
		return r, false
	}
	r.Quantity = engine.QuantityID(quantity)
	return r, true
}

// The fields of a reading, as bits of those seen.
const (
	sawQuantity = 1 << iota
	sawValue
	sawTime
	sawInstrument
	sawUncertainty
	sawUnit
	sawID
	sawOccasion
	sawAbove
	sawBelow
	sawBetween
	sawSamples

	sawIndication = sawValue | sawAbove | sawBelow | sawBetween // one of them
)

func (s *scanner) reading() (r engine.Reading, ok bool) {
	if !s.token('{') {
		return r, false
	}
	seen := 0
	for {
		name, ok := s.text()
		if !ok || !s.token(':') {
			return r, false
		}
		bit, ok := s.member(&r, name)
		if !ok || seen&bit != 0 {
			return r, false
		}
		seen |= bit
		if s.token(',') {
			continue
		}
		one := bits.OnesCount(uint(seen&sawIndication)) == 1
		return r, s.token('}') && one && takenAsIs(&r)
	}
}

// member reads the value of the named field and returns the field's bit.
func (s *scanner) member(r *engine.Reading, name []byte) (bit int, ok bool) {
	switch string(name) {
	case "value":
		r.Value, ok = s.number()
		return sawValue, ok
	case "random_standard_uncertainty":
		r.HasUncertainty = true
		r.RandomStandardUncertainty, ok = s.number()
		return sawUncertainty, ok
	case "above":
		r.Extent = engine.ExtentAbove
		r.Value, ok = s.number()
		return sawAbove, ok
	case "below":
		r.Extent = engine.ExtentBelow
		r.Value, ok = s.number()
		return sawBelow, ok
	case "between":
		r.Extent = engine.ExtentBetween
		r.Value, r.Upper, ok = s.between()
		return sawBetween, ok
	case "sample_count":
		r.Samples, ok = s.count()
		return sawSamples, ok
	}
	return s.textMember(r, name)
}

// textMember reads the value of the named field, which has to be a text.
func (s *scanner) textMember(r *engine.Reading, name []byte) (bit int, ok bool) {
	text, ok := s.text()
	if !ok {
		return 0, false
	}
	switch string(name) {
	case "quantity":
		r.Quantity = reuse(s.last.Quantity, text)
		return sawQuantity, true
	case "time":
		t, ok := parseTime(text)
		setTime(r, t)
		return sawTime, ok
	case "instrument":
		r.Instrument = reuse(s.last.Instrument, text)
		return sawInstrument, true
	case "unit":
		r.Unit = reuse(s.last.Unit, text)
		return sawUnit, true
	case "reading_id":
		r.ID = engine.ReadingID(text)
		return sawID, true
	case "occasion":
		r.Occasion = reuse(s.last.Occasion, text)
		return sawOccasion, true
	}
	return 0, false
}

// reuse returns text as a string, without a copy if it is the one before.
func reuse[S ~string](before S, text []byte) S {
	if string(before) == string(text) {
		return before
	}
	return S(text)
}

// space skips white space.
func (s *scanner) space() {
	for s.i < len(s.b) {
		switch s.b[s.i] {
		case ' ', '\t', '\r', '\n':
			s.i++
		default:
			return
		}
	}
}

// token reads one character of structure, if it comes next.
func (s *scanner) token(c byte) bool {
	s.space()
	if s.i < len(s.b) && s.b[s.i] == c {
		s.i++
		return true
	}
	return false
}

func (s *scanner) end() bool {
	s.space()
	return s.i == len(s.b)
}

func (s *scanner) key(name string) bool {
	text, ok := s.text()
	return ok && string(text) == name && s.token(':')
}

// text reads a string without escapes; the result is part of the body.
func (s *scanner) text() ([]byte, bool) {
	if !s.token('"') {
		return nil, false
	}
	start, ascii := s.i, true
	for ; s.i < len(s.b); s.i++ {
		switch c := s.b[s.i]; {
		case c == '"':
			text := s.b[start:s.i]
			s.i++
			return text, ascii || utf8.Valid(text)
		case c == '\\' || c < ' ':
			return nil, false
		case c >= utf8.RuneSelf:
			ascii = false
		}
	}
	return nil, false
}

// number reads a number as parseNumber does.
func (s *scanner) number() (float64, bool) {
	s.space()
	n, zero := scanNumber(s.b[s.i:])
	if n == 0 {
		return 0, false
	}
	x, err := strconv.ParseFloat(string(s.b[s.i:s.i+n]), 64)
	s.i += n
	return x, err == nil && (x != 0 || zero)
}

// between reads the two limits of an indication, the lower one first.
func (s *scanner) between() (lower, upper float64, ok bool) {
	if !s.token('{') || !s.key("lower") {
		return 0, 0, false
	}
	if lower, ok = s.number(); !ok || !s.token(',') || !s.key("upper") {
		return 0, 0, false
	}
	upper, ok = s.number()
	return lower, upper, ok && s.token('}')
}

// count reads a whole number from 1, written in digits alone.
func (s *scanner) count() (uint32, bool) {
	s.space()
	start := s.i
	var n uint64
	for ; s.i < len(s.b) && s.b[s.i] >= '0' && s.b[s.i] <= '9' && n <= math.MaxUint32; s.i++ {
		n = 10*n + uint64(s.b[s.i]-'0')
	}
	return uint32(n), n > 0 && n <= math.MaxUint32 && s.b[start] != '0'
}

// appendResults writes the answer to a batch as marshalJSON would.
func appendResults(b []byte, results []engine.Result) []byte {
	b = append(b, `{"results":[`...)
	for i := range results {
		if i > 0 {
			b = append(b, ',')
		}
		b = appendResult(b, i, &results[i])
	}
	n := countResults(results)
	b = strconv.AppendUint(append(b, `],"applied_count":`...), uint64(n.applied), 10)
	b = strconv.AppendUint(append(b, `,"duplicate_count":`...), uint64(n.duplicate), 10)
	b = strconv.AppendUint(append(b, `,"refused_count":`...), uint64(n.refused), 10)
	return append(b, "}\n"...)
}

func appendResult(b []byte, index int, r *engine.Result) []byte {
	b = strconv.AppendInt(append(b, `{"index":`...), int64(index), 10)
	b = appendText(append(b, `,"reading_id":`...), string(r.ReadingID))
	if r.Time.Valid() {
		b = append(appendTime(append(b, `,"time":"`...), r.Time.Time()), '"')
	}
	b = append(append(b, `,"status":"`...), r.Status.String()...)
	b = appendText(append(b, `","reason":`...), string(r.Reason))
	return append(appendText(append(b, `,"detail":`...), r.Detail), '}')
}

// appendText writes a JSON string. What isn't UTF-8 can't come from a request.
func appendText(b []byte, s string) []byte {
	if s == "" {
		return append(b, `""`...)
	}
	quoted, err := jsontext.AppendQuote(b, s)
	if err != nil {
		return append(b, `""`...)
	}
	return quoted
}
