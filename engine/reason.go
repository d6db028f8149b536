package engine

import "fmt"

// Reason is a stable word for why something was refused. The list is closed
// and append-only: words are neither changed nor used again.
type Reason string

// Reasons of refused readings.
const (
	UnknownQuantity          Reason = "UNKNOWN_QUANTITY"
	QuantityRetired          Reason = "QUANTITY_RETIRED"
	UnknownInstrument        Reason = "UNKNOWN_INSTRUMENT"
	UnitMismatch             Reason = "UNIT_MISMATCH"
	ValueOutOfRange          Reason = "VALUE_OUT_OF_RANGE"
	TimeOutOfRange           Reason = "TIME_OUT_OF_RANGE"
	TimeInFuture             Reason = "TIME_IN_FUTURE"
	BeforePrior              Reason = "BEFORE_PRIOR"
	NoRepeatability          Reason = "NO_REPEATABILITY"
	RandomUncertaintyInvalid Reason = "RANDOM_UNCERTAINTY_INVALID"
	ReadingIDConflict        Reason = "READING_ID_CONFLICT"
	NotSupported             Reason = "NOT_SUPPORTED" // also of requests
	InstrumentRetired        Reason = "INSTRUMENT_RETIRED"
)

// Reasons of refused requests.
const (
	MalformedBody    Reason = "MALFORMED_BODY"
	UnknownField     Reason = "UNKNOWN_FIELD"
	UnknownParameter Reason = "UNKNOWN_PARAMETER"
	MissingField     Reason = "MISSING_FIELD"
	InvalidField     Reason = "INVALID_FIELD"
	InvalidID        Reason = "INVALID_ID"
	NotFound         Reason = "NOT_FOUND"
	BodyTooLarge     Reason = "BODY_TOO_LARGE"
	BatchTooLarge    Reason = "BATCH_TOO_LARGE"
	ETagMismatch     Reason = "ETAG_MISMATCH"
	AlreadyExists    Reason = "ALREADY_EXISTS"
	UnitFixed        Reason = "UNIT_FIXED"
	Overloaded       Reason = "OVERLOADED"
	StorageFailed    Reason = "STORAGE_FAILED"
)

// ReadingReasons and RequestReasons list every Reason, in the order in which
// the ledger numbers them; append only.
var (
	ReadingReasons = [...]Reason{
		UnknownQuantity, QuantityRetired, UnknownInstrument, UnitMismatch, ValueOutOfRange,
		TimeOutOfRange, TimeInFuture, BeforePrior, NoRepeatability, RandomUncertaintyInvalid,
		ReadingIDConflict, NotSupported, InstrumentRetired,
	}
	RequestReasons = [...]Reason{
		MalformedBody, UnknownField, UnknownParameter, MissingField, InvalidField, InvalidID,
		NotFound, BodyTooLarge, BatchTooLarge, ETagMismatch, AlreadyExists, UnitFixed,
		NotSupported, Overloaded, StorageFailed,
	}
)

// Error is a refused request: which field, why, and one sentence that says
// what to do.
type Error struct {
	Reason  Reason
	Field   string // path such as prior.standard_deviation; empty if no field is to blame
	Message string
}

func (e *Error) Error() string { return e.Message }

func refuse(reason Reason, field, format string, args ...any) *Error {
	return &Error{Reason: reason, Field: field, Message: fmt.Sprintf(format, args...)}
}
