package engine

import (
	"fmt"
	"slices"
	"strings"
)

// Method is how a belief is held and folded.
type Method string

// Every Method; SupportTable says which serves what, and how well.
const (
	MethodSums   Method = "SUMS"   // exact sums
	MethodFilter Method = "FILTER" // Kalman filter: jointly normal
	MethodBank   Method = "BANK"   // Kalman filters at nodes of a learned repeatability
	MethodCounts Method = "COUNTS" // counts of what was displayed or censored, exact when asked
	MethodGrid   Method = "GRID"   // a density on points, one at each node of a learned repeatability
)

// Supported is a row of SupportTable: what a method serves, and its error bound.
type Supported struct {
	Method       Method
	Dynamics     []DynamicsForm
	Learned      int    // repeatabilities that may be learned
	Instruments  bool   // readings may name instruments
	Errors       Errors // at most
	Displays     bool   // displays coarser than r, and censored readings
	Outliers     bool
	Changes      bool // renewals and steps that widen the level
	Floor        bool // a floor of r, and means of several indications while r is learned
	Bound        string
	reservations func(t *traits) bool // what is left out of the row
}

var anyDynamics = []DynamicsForm{DynamicsConstant, DynamicsRandomWalk, DynamicsLinearTrend, DynamicsMeanReverting}

// SupportTable lists the combinations of what can be declared that are supported; the first
// row that serves a quantity is how its belief is held. z is the normal
// quantile of a probability, compared for 1e-9 < p < 1 - 1e-9.
var SupportTable = []Supported{
	{
		Method: MethodSums, Dynamics: []DynamicsForm{DynamicsConstant}, Learned: 1, Errors: NoErrors,
		Bound: "exact: tails to 1e-10 of themselves",
	},
	{
		Method: MethodFilter, Dynamics: anyDynamics, Instruments: true, Learned: 0, Errors: FurtherErrors, Changes: true, Floor: true,
		Bound: "exact but for parts relative to the level; a resolution d up to r counts as variance d^2/12",
	},
	{
		Method: MethodBank, Dynamics: anyDynamics, Instruments: true, Learned: 1, Errors: FurtherErrors, Changes: true, Floor: true,
		Bound: "z to 0.001, mean to 1 % and standard deviation to 3 % of the exact standard deviation",
	},
	{
		Method: MethodCounts, Dynamics: []DynamicsForm{DynamicsConstant}, Learned: 1, Instruments: true, Errors: OneBias, Displays: true, Floor: true,
		Bound:        "z to 0.03, mean to 1 % and standard deviation to 3 % of the exact standard deviation",
		reservations: func(t *traits) bool { return t.further },
	},
	{
		Method: MethodGrid, Dynamics: []DynamicsForm{DynamicsConstant, DynamicsRandomWalk, DynamicsMeanReverting},
		Learned: 1, Instruments: true, Errors: NoErrors, Displays: true, Outliers: true, Changes: true, Floor: true,
		Bound: "z to 0.03, mean to 1 % and standard deviation to 3 % of the exact standard deviation",
	},
	{
		Method: MethodGrid, Dynamics: []DynamicsForm{DynamicsConstant, DynamicsRandomWalk},
		Learned: 1, Instruments: true, Errors: OneBias, Displays: true, Outliers: true, Changes: true, Floor: true,
		Bound:        "likewise under one calibration; under several z to 0.1 for p from 2e-5, to 0.3 beyond; a walk with known r only",
		reservations: func(t *traits) bool { return t.dynamics == DynamicsRandomWalk && t.learned > 0 },
	},
}

// serves tells whether the row is for t.
func (s *Supported) serves(t *traits) bool {
	switch {
	case !slices.Contains(s.Dynamics, t.dynamics), t.learned > s.Learned, !t.plain && !s.Instruments, t.errors > s.Errors:
		return false
	case (t.display || t.censored) && !s.Displays, t.outliers && !s.Outliers, t.changes && !s.Changes:
		return false
	case (t.floored || t.averaged && t.learned > 0) && !s.Floor, t.log && t.errors > NoErrors:
		return false
	}
	return s.reservations == nil || !s.reservations(t)
}

// method returns how a belief of those traits is held; empty if it isn't supported.
func (t *traits) method() Method {
	for i := range SupportTable {
		if SupportTable[i].serves(t) {
			return SupportTable[i].Method
		}
	}
	return ""
}

// relaxation is a change that may make traits supported.
type relaxation struct {
	field  string
	change func(t *traits) bool // false if it changes nothing
	remedy string
}

// relaxations in the order in which they are proposed: what costs a user least first.
var relaxations = []relaxation{
	{"repeatability.learned.floor", func(t *traits) bool {
		was := t.display && t.learned > 0
		t.display, t.floored = t.display && !was, t.floored || was
		return was
	}, "repeatability.learned.floor of at least the resolution"},
	{"repeatability.learned", func(t *traits) bool {
		was := t.learned > 1
		t.learned = min(t.learned, 1)
		return was
	}, "one learned repeatability, with the standard_deviation of the others declared"},
	{"outliers", func(t *traits) bool {
		was := t.outliers
		t.outliers = false
		return was
	}, "no outliers"},
	{"dynamics", func(t *traits) bool {
		was := t.dynamics == DynamicsLinearTrend || t.dynamics == DynamicsMeanReverting
		if was {
			t.dynamics = DynamicsRandomWalk
		}
		return was
	}, "dynamics.random_walk"},
	{"instrument", func(t *traits) bool {
		was := t.errors > OneBias
		if was {
			t.errors = OneBias
		}
		return was
	}, "all readings by one instrument whose calibrations state bias and uncertainty alone"},
	{"scale", func(t *traits) bool {
		was := t.log
		t.log = false
		return was
	}, "scale LINEAR"},
	{"instrument", func(t *traits) bool {
		was := t.errors > NoErrors
		t.errors = NoErrors
		return was
	}, "readings by instruments without calibrations or noise of their own"},
	{"censored", func(t *traits) bool {
		was := t.censored
		t.censored = false
		return was
	}, "readings with a value, within the measuring interval"},
	{"resolution", func(t *traits) bool {
		was := t.display
		t.display = false
		return was
	}, "a repeatability of at least the resolution"},
}

// objection returns why t isn't supported: the field to change, and what is the nearest
// supported combination; empty if t is supported.
func (t *traits) objection() (field, sentence string) {
	if t.method() != "" {
		return "", ""
	}
	for changes := 1; changes <= len(relaxations); changes++ {
		if r := t.relaxed(0, changes); r != nil {
			var remedies []string
			for _, i := range r {
				remedies = append(remedies, relaxations[i].remedy)
			}
			return relaxations[r[len(r)-1]].field, t.unsupported(strings.Join(remedies, " and "))
		}
	}
	return "dynamics", t.unsupported("dynamics.constant with values alone")
}

// relaxed returns relaxations from an index on, of that number, that make t supported; nil if
// there are none.
func (t *traits) relaxed(from, number int) []int {
	for i := from; i < len(relaxations); i++ {
		near := *t
		if !relaxations[i].change(&near) {
			continue
		}
		if number == 1 && near.method() != "" {
			return []int{i}
		}
		if number > 1 {
			if others := near.relaxed(i+1, number-1); others != nil {
				return append([]int{i}, others...)
			}
		}
	}
	return nil
}

func (t *traits) unsupported(nearest string) string {
	return fmt.Sprintf("%s are not supported together; the nearest supported combination has %s", t.words(), nearest)
}

// checkSupport refuses what can't be believed whatever the readings are.
func (d *Declaration) checkSupport() *Error {
	if field, sentence := improper(d, nil); field != "" {
		return refuse(NotSupported, field, "%s", sentence)
	}
	t := traitsOf(d, 0, &readAs{})
	if field, sentence := t.objection(); field != "" {
		return refuse(NotSupported, field, "%s", sentence)
	}
	return nil
}
