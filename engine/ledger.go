package engine

import "errors"

// Position numbers the records of a ledger: 1, 2, 3 ... without gaps.
type Position uint64

// Kind tells what a Record records.
type Kind uint8

const (
	KindReading     Kind = iota + 1 // an applied reading
	KindRefusal                     // a refused reading
	KindDeclaration                 // a quantity declared, redeclared or revived
	KindRetirement                  // a quantity retired
	KindInstrument                  // an instrument declared, redeclared, retired or revived
	KindRenewal                     // the part that a quantity is measured on renewed, or that withdrawn
	KindStep                        // a step detected in a quantity, and published
)

// Record is one entry of the ledger. Fields that a kind doesn't use are zero.
type Record struct {
	Position    Position
	CommitTime  Instant // stamped by the ledger, the same for a whole group, never decreasing
	ReceiveTime Instant
	Kind        Kind
	Principal   string
	RequestID   string
	Number      QuantityNumber // of the quantity; 0 on a refusal for an unknown one
	Revision    uint32         // of the declaration in force, or made by this record

	// Of readings and refusals. Reading.Time is always set; Reading.HasTime
	// tells whether it was sent. Reading.Quantity is empty where Number is set.
	Reading Reading
	// PutThrough is the position of the refusal which this record replaces;
	// 0 for a reading that came from outside.
	PutThrough Position
	Reason     Reason // of a refusal
	Detail     string // of a refusal

	// Of declarations.
	Quantity    QuantityID
	Declaration *Declaration // never changed once recorded

	Instrument *Instrument // as it is from this record on; never changed once recorded
	Renewal    *Renewal    // likewise
	Step       *StepEvent  // likewise
}

// StepEvent tells of a step as it was detected and published: a lasting shift of the
// readings of a quantity against their predictions. Late readings and redeclarations
// don't rewrite it.
type StepEvent struct {
	Time  Instant // of the reading at which it was detected
	Since Instant // of the reading after which the shift began to show
	Up    bool    // the readings lie above their predictions; else below
	Widen float64 // standard deviation added to the level, in the quantity's unit; 0: none
}

// Row is the index entry of an applied reading: what a fold needs of it.
type Row struct {
	Time           Instant
	Value          float64
	Upper          float64 // of ExtentBetween; else 0
	Uncertainty    float64
	Position       Position
	Occasion       uint64 // a hash of the reading's occasion; 0 without one
	Instrument     InstrumentNumber
	Samples        uint32 // 0 counts as 1
	Extent         Extent
	HasUncertainty bool
	HasID          bool // the reading has an ID, found in the record
}

// Group is a set of records that become durable together, with the piece of
// checkpoint that travels with them.
type Group struct {
	Records    []Record // Position and CommitTime are set by Append
	Checkpoint []CheckpointEntry
	// Sweep, if not nil, is written with the last piece of a sweep.
	Sweep *Sweep
}

// CheckpointEntry is the checkpoint of one quantity, or a further chunk of its
// rows.
type CheckpointEntry struct {
	Number   QuantityNumber
	Quantity *Quantity // written if not nil
	State    []byte    // opaque to the ledger; written if not nil, always with Through
	Through  Position  // the last record that State includes
	Segment  uint32    // of Rows
	Chunk    uint32    // of Rows, from 0 within (Segment, Number)
	Rows     []Row     // in canonical order within the chunk; at most MaxChunkRows
}

// MaxChunkRows bounds the rows of one CheckpointEntry.
const MaxChunkRows = 128

// Sweep says what a complete checkpoint includes: every record up to Through
// is in the states, and every applied reading up to Through is in the rows of
// segments up to Segment. Replay starts after Through.
type Sweep struct {
	Segment uint32
	Through Position
	Summary []byte // opaque: counts and the log of refusals
}

// Ledger is the durable, append-only record, and the place where checkpoints
// are kept. Append is called by one goroutine at a time; the readers may be
// called by any, also while Append runs, and see only durable records.
type Ledger interface {
	// Append stamps the records with position and commit time and returns when
	// the group is durable. After an error nothing of the group was written;
	// an error that is ErrDiskFull can pass, any other is final for this
	// Ledger: further calls fail.
	Append(g *Group) error
	// Replay calls fn for every record from the given position on, in order.
	// fn may keep nothing of *Record but copies of its fields (strings may be
	// kept). It stops at the first error of fn and returns it.
	Replay(from Position, fn func(*Record) error) error
	// Records reads the records at the given positions, in the order given.
	Records(at []Position, fn func(*Record) error) error
	// Rows calls fn with each stored chunk of rows of the quantity, by segment
	// and chunk, skipping chunks in which every row is earlier than since. It
	// covers complete segments only. fn must not keep the slice.
	Rows(number QuantityNumber, since Instant, fn func([]Row) error) error
	// Checkpoint returns the last complete sweep (zero if none) after calling
	// fn for every quantity stored, by number.
	Checkpoint(fn func(CheckpointEntry) error) (Sweep, error)
	// Instruments calls fn with the latest record of each instrument, by number.
	Instruments(fn func(*Record) error) error
	// Close releases the file.
	Close() error
}

// ErrDiskFull marks an Append that a full disk refused before anything was
// synced; it may succeed once the ledger is reopened and space is found.
var ErrDiskFull = errors.New("no space left for the ledger; free some and the service resumes by itself")

// ErrStorageFailed marks a ledger that must not be written again.
var ErrStorageFailed = errors.New("the ledger could not be made durable and is no longer written")
