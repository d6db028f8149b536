package engine

import (
	"slices"
)

// Renewal says that the part a quantity is measured on was replaced: from Time
// on, level and slope start anew from what is stated here, independent of the
// past. What was learned of the instruments stays.
type Renewal struct {
	RequestID  string
	Time       Instant
	Reason     string
	Prior      Prior // HasTime is false: it holds at Time
	HasSlope   bool
	Slope      Slope // without HasSlope, that of the declaration
	Position   Position
	CreateTime Instant
	Withdrawn  bool // it counts no longer
	// WithdrawTime is set if Withdrawn.
	WithdrawTime Instant
}

// same tells whether r and s ask for the same.
func (r *Renewal) same(s *Renewal) bool {
	return r.Time == s.Time && r.Reason == s.Reason && r.Prior == s.Prior && r.HasSlope == s.HasSlope && r.Slope == s.Slope
}

// InForce returns the renewals that count, by time.
func (q *Quantity) InForce() []Renewal {
	if len(q.Renewals) == 0 {
		return nil
	}
	return slices.DeleteFunc(slices.Clone(q.Renewals), func(r Renewal) bool { return r.Withdrawn })
}

// renewal returns the renewal with a request ID, nil if there is none.
func (q *Quantity) renewal(requestID string) *Renewal {
	i := slices.IndexFunc(q.Renewals, func(r Renewal) bool { return r.RequestID == requestID })
	if i < 0 {
		return nil
	}
	return &q.Renewals[i]
}

// withRenewal returns q's renewals with r added, or in place of the one with
// the same request ID.
func (q *Quantity) withRenewal(r Renewal) []Renewal {
	all := slices.DeleteFunc(slices.Clone(q.Renewals), func(s Renewal) bool { return s.RequestID == r.RequestID })
	n, _ := slices.BinarySearchFunc(all, r, func(a, b Renewal) int {
		switch {
		case a.Time < b.Time || a.Time == b.Time && a.Position < b.Position:
			return -1
		case a.Time == b.Time && a.Position == b.Position:
			return 0
		}
		return 1
	})
	return slices.Insert(all, n, r)
}
