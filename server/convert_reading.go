package server

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
	"unicode"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// readingsOf reads a batch. Whatever is wrong with one of its readings that
// isn't left to a status makes an error of the whole.
func readingsOf(messages []*leadlinev1.Reading) ([]engine.Reading, error) {
	if err := checkBatchSize(len(messages)); err != nil {
		return nil, err
	}
	readings := make([]engine.Reading, len(messages))
	for i, m := range messages {
		r, err := readingOf(m)
		if err == nil && r.Quantity == "" {
			err = refuse(engine.MissingField, "quantity", "quantity is missing; give the ID of what was measured")
		}
		if err != nil {
			return nil, inMessage(err, "readings["+strconv.Itoa(i)+"].")
		}
		readings[i] = r
	}
	return readings, nil
}

func checkBatchSize(n int) error {
	switch {
	case n == 0:
		return refuse(engine.MissingField, "readings", "readings is missing or empty; give at least one")
	case n > engine.MaxBatchReadings:
		return refuse(engine.BatchTooLarge, "readings", fmt.Sprintf("readings has more than %d elements; send them in several requests", engine.MaxBatchReadings))
	}
	return nil
}

// readingOfQuantity reads the one reading of a request that names the quantity
// itself.
func readingOfQuantity(id string, m *leadlinev1.Reading) (engine.Reading, error) {
	r, err := readingOf(m)
	if err != nil {
		return r, err
	}
	if r.Quantity != "" && string(r.Quantity) != id {
		return r, refuse(engine.InvalidField, "quantity", fmt.Sprintf("quantity is %q, not the %q of the request; leave it out", shorten(string(r.Quantity)), id))
	}
	r.Quantity = engine.QuantityID(id)
	return r, nil
}

// readingOf reads one reading. What a status of the reading can tell is left to
// the engine: here is refused only what lacks a value or is over a limit.
func readingOf(m *leadlinev1.Reading) (engine.Reading, *engine.Error) {
	if m == nil {
		m = &leadlinev1.Reading{}
	}
	r := engine.Reading{
		Quantity:                  engine.QuantityID(m.GetQuantity()),
		HasTime:                   m.GetTime() != nil,
		Instrument:                engine.InstrumentID(m.GetInstrument()),
		HasUncertainty:            m.RandomStandardUncertainty != nil,
		RandomStandardUncertainty: m.GetRandomStandardUncertainty(),
		Unit:                      m.GetUnit(),
		ID:                        engine.ReadingID(m.GetReadingId()),
		Occasion:                  m.GetOccasion(),
	}
	if err := setIndication(&r, m); err != nil {
		return r, err
	}
	if err := setSamples(&r, m.SampleCount); err != nil {
		return r, err
	}
	if field, most := overLimit(&r); field != "" {
		return r, refuse(engine.InvalidField, field, fmt.Sprintf("%s is longer than %d bytes; shorten it", field, most))
	}
	if !printable(r.Occasion) {
		return r, refuse(engine.InvalidField, "occasion", "occasion has a character that isn't printable; leave such characters out")
	}
	if r.HasTime {
		if !m.GetTime().IsValid() {
			return r, refuse(engine.InvalidField, "time", "time is not a time of the years 1 to 9999; give one")
		}
		setTime(&r, m.GetTime().AsTime())
	}
	return r, nil
}

// setTime sets the time of a reading; one that the engine can't hold is
// refused there and named as it was sent.
func setTime(r *engine.Reading, t time.Time) {
	if r.HasTime, r.Time = true, engine.InstantOf(t); !r.Time.Valid() {
		r.SentTime = t.UTC().Format(time.RFC3339Nano)
	}
}

// overLimit names the first text of r that is too long to be kept, even as
// refused, and how many bytes it may have.
func overLimit(r *engine.Reading) (field string, most int) {
	switch {
	case len(r.Quantity) > engine.MaxIDBytes:
		return "quantity", engine.MaxIDBytes
	case len(r.Instrument) > engine.MaxIDBytes:
		return "instrument", engine.MaxIDBytes
	case len(r.Unit) > engine.MaxUnitBytes:
		return "unit", engine.MaxUnitBytes
	case len(r.ID) > engine.MaxReadingIDBytes:
		return "reading_id", engine.MaxReadingIDBytes
	case len(r.Occasion) > maxOccasionBytes:
		return "occasion", maxOccasionBytes
	}
	return "", 0
}

const maxOccasionBytes = 128

// printable tells whether a text, which is UTF-8, can be shown on a line.
func printable(s string) bool {
	return strings.IndexFunc(s, func(r rune) bool { return !unicode.IsPrint(r) }) < 0
}

// takenAsIs tells whether a reading that was scanned has nothing that readingOf
// would refuse.
func takenAsIs(r *engine.Reading) bool {
	field, _ := overLimit(r)
	return field == "" && printable(r.Occasion)
}

// inMessage puts the path of a message before a field and before the sentence,
// which begins with it.
func inMessage(err *engine.Error, path string) error {
	return refuse(err.Reason, path+err.Field, path+err.Message)
}

// counts is how many readings of a request had which status.
type counts struct{ applied, duplicate, refused uint32 }

func countResults(results []engine.Result) counts {
	var c counts
	for i := range results {
		switch results[i].Status {
		case engine.Applied:
			c.applied++
		case engine.Duplicate:
			c.duplicate++
		default:
			c.refused++
		}
	}
	return c
}

func resultMessages(results []engine.Result) []*leadlinev1.ReadingResult {
	messages := make([]*leadlinev1.ReadingResult, len(results))
	for i := range results {
		messages[i] = resultMessage(i, &results[i])
	}
	return messages
}

func resultMessage(index int, r *engine.Result) *leadlinev1.ReadingResult {
	return &leadlinev1.ReadingResult{
		Index:     uint32(index),
		ReadingId: string(r.ReadingID),
		Time:      timestamp(r.Time),
		Status:    statusMessage(r.Status),
		Reason:    string(r.Reason),
		Detail:    r.Detail,
	}
}

func statusMessage(s engine.Status) leadlinev1.Reading_Status {
	switch s {
	case engine.Applied:
		return leadlinev1.Reading_APPLIED
	case engine.Duplicate:
		return leadlinev1.Reading_DUPLICATE
	case engine.Refused:
		return leadlinev1.Reading_REFUSED
	}
	return leadlinev1.Reading_UNSPECIFIED
}

func recordedMessage(r *engine.StoredReading) *leadlinev1.RecordedReading {
	m := &leadlinev1.RecordedReading{
		Quantity:       string(r.Quantity),
		Time:           timestamp(r.Time),
		Instrument:     string(r.Instrument),
		Unit:           r.Unit,
		ReadingId:      string(r.ID),
		Status:         statusMessage(r.Status),
		Reason:         string(r.Reason),
		Detail:         detailOf(r),
		Occasion:       r.Occasion,
		ReceiveTime:    timestamp(r.ReceiveTime),
		LedgerPosition: uint64(r.Position),
	}
	setRecordedIndication(m, &r.Reading)
	if r.HasCalibration {
		m.Calibration = calibrationStateMessage(r.Calibration).Enum()
	}
	if r.HasUncertainty && finite(r.RandomStandardUncertainty) {
		m.RandomStandardUncertainty = &r.RandomStandardUncertainty
	}
	return m
}

func calibrationStateMessage(s engine.CalibrationState) leadlinev1.RecordedReading_CalibrationState {
	switch s {
	case engine.CalibrationInForce:
		return leadlinev1.RecordedReading_IN_FORCE
	case engine.CalibrationOverdue:
		return leadlinev1.RecordedReading_OVERDUE
	case engine.CalibrationNotYet:
		return leadlinev1.RecordedReading_NOT_YET_VALID
	case engine.CalibrationNone:
		return leadlinev1.RecordedReading_UNCALIBRATED
	}
	return leadlinev1.RecordedReading_UNSPECIFIED
}

// detailOf returns why a stored reading was refused. What JSON has no number
// for, and so is left out of the message, is named, also where the reading was
// refused for something else.
func detailOf(r *engine.StoredReading) string {
	detail := r.Detail
	if r.Reason != engine.ValueOutOfRange {
		detail += unwritten(&r.Reading)
	}
	u := r.RandomStandardUncertainty
	if r.HasUncertainty && !finite(u) && r.Reason != engine.RandomUncertaintyInvalid {
		detail += fmt.Sprintf("; its random_standard_uncertainty is %v", u)
	}
	return detail
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }
