package engine

import "fmt"

// Extent tells what a reading says of the indication.
type Extent uint8

const (
	ExtentValue   Extent = iota // it was Value, as far as the display shows
	ExtentAbove                 // it was above Value
	ExtentBelow                 // it was below Value
	ExtentBetween               // it was between Value and Upper
)

// said is what a reading says: a repeat says the same.
type said struct {
	value, upper float64
	extent       Extent
}

// String gives it in words.
func (s said) String() string {
	switch s.extent {
	case ExtentAbove:
		return fmt.Sprint("above ", s.value)
	case ExtentBelow:
		return fmt.Sprint("below ", s.value)
	case ExtentBetween:
		return fmt.Sprint("between ", s.value, " and ", s.upper)
	}
	return fmt.Sprint(s.value)
}

func (r *Reading) said() said { return said{r.Value, r.Upper, r.Extent} }

func (r *Row) said() said { return said{r.Value, r.Upper, r.Extent} }

// Reading is one indication as it was sent.
type Reading struct {
	Quantity                  QuantityID
	Value                     float64 // in the quantity's unit
	Upper                     float64 // of ExtentBetween, above Value; else 0
	Extent                    Extent
	Samples                   uint32 // the reading is a mean of so many, which divides the white part of its variance; 0 counts as 1
	HasTime                   bool
	Time                      Instant // if not HasTime, the receipt instant of its request
	SentTime                  string  // as it was sent, where Time can't hold it; not recorded but in the detail of the refusal
	Instrument                InstrumentID
	Occasion                  string // readings of one instrument and occasion share an error; empty: of none but this reading's
	HasUncertainty            bool
	RandomStandardUncertainty float64
	Unit                      string    // empty: the quantity's
	ID                        ReadingID // kept for long, so not a piece of a larger text
}

// Status is what became of a reading.
type Status uint8

const (
	Applied Status = iota + 1
	Duplicate
	Refused
)

// String returns the word of the interface.
func (s Status) String() string {
	switch s {
	case Applied:
		return "APPLIED"
	case Duplicate:
		return "DUPLICATE"
	case Refused:
		return "REFUSED"
	}
	return "UNSPECIFIED"
}

// Result is the answer to one reading of a batch.
type Result struct {
	ReadingID ReadingID
	Time      Instant // the reading's, or the one it was given
	Status    Status
	Reason    Reason // of a refusal, else empty
	Detail    string // of a refusal: one sentence with field and remedy
	Position  Position
}

// Batch is the readings of one request.
type Batch struct {
	Readings  []Reading
	Receive   Instant
	Principal string
	RequestID string
}
