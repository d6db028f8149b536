package server

import (
	"context"
	"errors"
	"net/http"
	"time"

	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/protoadapt"
	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
)

// errorDomain is the domain of every ErrorInfo.
const errorDomain = "leadline"

// outcome is how a refused request is answered.
type outcome struct {
	reason engine.Reason
	code   codes.Code
	http   int           // 0: the usual one of code
	retry  time.Duration // 0: sending the same again doesn't help
}

// outcomes is the one table from reason to answer. Reasons of readings are
// statuses, not errors; those that some request can give as well are here too.
var outcomes = [...]outcome{
	{reason: engine.MalformedBody, code: codes.InvalidArgument},
	{reason: engine.UnknownField, code: codes.InvalidArgument},
	{reason: engine.UnknownParameter, code: codes.InvalidArgument},
	{reason: engine.MissingField, code: codes.InvalidArgument},
	{reason: engine.InvalidField, code: codes.InvalidArgument},
	{reason: engine.InvalidID, code: codes.InvalidArgument},
	{reason: engine.NotFound, code: codes.NotFound},
	{reason: engine.BodyTooLarge, code: codes.ResourceExhausted, http: http.StatusRequestEntityTooLarge},
	{reason: engine.BatchTooLarge, code: codes.InvalidArgument},
	{reason: engine.ETagMismatch, code: codes.Aborted},
	{reason: engine.AlreadyExists, code: codes.AlreadyExists},
	{reason: engine.UnitFixed, code: codes.FailedPrecondition},
	{reason: engine.NotSupported, code: codes.Unimplemented},
	{reason: engine.Overloaded, code: codes.ResourceExhausted, retry: time.Second},
	{reason: engine.StorageFailed, code: codes.Unavailable, retry: 5 * time.Second},
	{reason: engine.UnknownQuantity, code: codes.NotFound},
	{reason: engine.QuantityRetired, code: codes.FailedPrecondition},
	{reason: engine.UnknownInstrument, code: codes.NotFound},
	{reason: engine.UnitMismatch, code: codes.InvalidArgument},
	{reason: engine.ValueOutOfRange, code: codes.InvalidArgument},
	{reason: engine.TimeOutOfRange, code: codes.InvalidArgument},
	{reason: engine.TimeInFuture, code: codes.InvalidArgument},
	{reason: engine.BeforePrior, code: codes.InvalidArgument},
	{reason: engine.NoRepeatability, code: codes.FailedPrecondition},
	{reason: engine.RandomUncertaintyInvalid, code: codes.InvalidArgument},
	{reason: engine.ReadingIDConflict, code: codes.AlreadyExists},
	{reason: engine.InstrumentRetired, code: codes.FailedPrecondition},
}

func outcomeOf(reason engine.Reason) (outcome, bool) {
	for _, o := range outcomes {
		if o.reason == reason {
			return o, true
		}
	}
	return outcome{}, false
}

// httpError is a refused request whose HTTP status isn't that of its reason,
// because it is about HTTP itself: a method or a media type.
type httpError struct {
	refused *engine.Error
	http    int
	allow   string // for 405
}

func (e *httpError) Error() string { return e.refused.Message }

func (e *httpError) Unwrap() error { return e.refused }

// failure is an error made ready for either protocol.
type failure struct {
	status *status.Status
	http   int
	retry  time.Duration
	fault  bool // not the caller's doing: to be logged
}

// failureOf turns whatever a service returned into an answer. A fault tells the
// caller nothing of the inside.
func failureOf(err error) failure {
	var refused *engine.Error
	switch {
	case errors.As(err, &refused):
		return refusal(err, refused)
	case errors.Is(err, engine.ErrStorageFailed), errors.Is(err, engine.ErrDiskFull):
		return refusal(err, &engine.Error{Reason: engine.StorageFailed, Message: "the storage takes no writes at the moment; try again later, and see the service's log"})
	case errors.Is(err, context.Canceled):
		return plain(codes.Canceled, "the request was cancelled; whether it took effect is open, so send it again")
	case errors.Is(err, context.DeadlineExceeded):
		return plain(codes.DeadlineExceeded, "the time for the request ran out; whether it took effect is open, so send it again")
	}
	if st, ok := status.FromError(err); ok {
		return failure{status: st, http: httpStatus(st.Code())}
	}
	f := plain(codes.Internal, "the service made a mistake, which is in its log; try again, and report it if it stays")
	f.fault = true
	return f
}

func plain(code codes.Code, message string) failure {
	return failure{status: status.New(code, message), http: httpStatus(code)}
}

func refusal(err error, refused *engine.Error) failure {
	o, known := outcomeOf(refused.Reason)
	if !known {
		o.code = codes.Internal
	}
	f := failure{http: o.http, retry: o.retry, fault: !known}
	var special *httpError
	if errors.As(err, &special) {
		f.http = special.http
	}
	if f.http == 0 {
		f.http = httpStatus(o.code)
	}
	f.status = withDetails(status.New(o.code, refused.Message), refused, o.retry)
	return f
}

// withDetails adds the machine-readable part: ErrorInfo always, a field
// violation where a field is to blame, a retry time where a retry helps.
func withDetails(st *status.Status, refused *engine.Error, retry time.Duration) *status.Status {
	details := []protoadapt.MessageV1{&errdetails.ErrorInfo{Reason: string(refused.Reason), Domain: errorDomain}}
	if refused.Field != "" {
		details = append(details, &errdetails.BadRequest{FieldViolations: []*errdetails.BadRequest_FieldViolation{{
			Field: refused.Field, Description: refused.Message, Reason: string(refused.Reason),
		}}})
	}
	if retry > 0 {
		details = append(details, &errdetails.RetryInfo{RetryDelay: durationpb.New(retry)})
	}
	detailed, err := st.WithDetails(details...)
	if err != nil { // only for the code OK
		return st
	}
	return detailed
}

// reasonOf returns the reason that a status carries, or "".
func reasonOf(st *status.Status) engine.Reason {
	for _, detail := range st.Details() {
		if info, ok := detail.(*errdetails.ErrorInfo); ok {
			return engine.Reason(info.GetReason())
		}
	}
	return ""
}

// fieldOf returns the field that a status blames, or "".
func fieldOf(st *status.Status) string {
	for _, detail := range st.Details() {
		if bad, ok := detail.(*errdetails.BadRequest); ok && len(bad.GetFieldViolations()) > 0 {
			return bad.GetFieldViolations()[0].GetField()
		}
	}
	return ""
}

func refuse(reason engine.Reason, field, message string) *engine.Error {
	return &engine.Error{Reason: reason, Field: field, Message: message}
}

// isReason tells whether err is a refusal with that reason.
func isReason(err error, reason engine.Reason) bool {
	var refused *engine.Error
	return errors.As(err, &refused) && refused.Reason == reason
}
