package server

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"testing"

	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/grpc/codes"

	"leadline.example/engine"
)

func TestEveryReasonHasOneOutcome(t *testing.T) {
	seen := map[engine.Reason]int{}
	for _, o := range outcomes {
		seen[o.reason]++
	}
	for _, list := range [][]engine.Reason{engine.ReadingReasons[:], engine.RequestReasons[:]} {
		for _, reason := range list {
			if seen[reason] != 1 {
				t.Errorf("%s stands %d times in the table", reason, seen[reason])
			}
			f := failureOf(&engine.Error{Reason: reason, Field: "a.b", Message: "a.b is wrong; give another"})
			if f.fault || f.status.Code() == codes.OK || f.http < 400 {
				t.Errorf("%s becomes %v, HTTP %d", reason, f.status, f.http)
			}
			if got := reasonOf(f.status); got != reason {
				t.Errorf("%s arrives as %q", reason, got)
			}
			if got := fieldOf(f.status); got != "a.b" {
				t.Errorf("%s: field %q", reason, got)
			}
		}
	}
	if len(seen) != len(outcomes) {
		t.Errorf("%d outcomes for %d reasons", len(outcomes), len(seen))
	}
}

func TestWhatWentWrongBecomesAnAnswer(t *testing.T) {
	tooLarge := &engine.Error{Reason: engine.BodyTooLarge, Message: "x"}
	for _, test := range []struct {
		name  string
		err   error
		code  codes.Code
		http  int
		retry bool
		fault bool
	}{
		{"a refusal", &engine.Error{Reason: engine.InvalidField, Message: "x"}, codes.InvalidArgument, 400, false, false},
		{"a wrapped refusal", fmt.Errorf("post: %w", tooLarge), codes.ResourceExhausted, 413, false, false},
		{"a changed ETag", &engine.Error{Reason: engine.ETagMismatch, Message: "x"}, codes.Aborted, 409, false, false},
		{"overload", &engine.Error{Reason: engine.Overloaded, Message: "x"}, codes.ResourceExhausted, 429, true, false},
		{"a full disk", fmt.Errorf("append: %w", engine.ErrDiskFull), codes.Unavailable, 503, true, false},
		{"failed storage", fmt.Errorf("append: %w", engine.ErrStorageFailed), codes.Unavailable, 503, true, false},
		{"an HTTP matter", &httpError{refused: refuse(engine.NotSupported, "", "x"), http: 405}, codes.Unimplemented, 405, false, false},
		{"a caller who left", context.Canceled, codes.Canceled, 499, false, false},
		{"a deadline", fmt.Errorf("post: %w", context.DeadlineExceeded), codes.DeadlineExceeded, 504, false, false},
		{"a status", errStreamStopping, codes.Unavailable, 503, false, false},
		{"a bug", errors.New("index out of range"), codes.Internal, http.StatusInternalServerError, false, true},
		{"a reason outside the list", &engine.Error{Reason: "NEW", Message: "x"}, codes.Internal, http.StatusInternalServerError, false, true},
	} {
		t.Run(test.name, func(t *testing.T) {
			f := failureOf(test.err)
			if f.status.Code() != test.code || f.http != test.http || f.fault != test.fault || f.retry > 0 != test.retry {
				t.Errorf("%v, HTTP %d, retry %v, fault %v", f.status, f.http, f.retry, f.fault)
			}
			var retry bool
			for _, detail := range f.status.Details() {
				if _, ok := detail.(*errdetails.RetryInfo); ok {
					retry = true
				}
			}
			if retry != test.retry {
				t.Errorf("retry time is told: %v", retry)
			}
		})
	}
	if message := failureOf(errors.New("/secret/path")).status.Message(); message == "/secret/path" {
		t.Error("the inside of a fault is told")
	}
}
