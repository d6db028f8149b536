package modelcheck

import "math"

// priorStage tells which looks at the prior there were.
type priorStage uint8

const (
	priorUnseen priorStage = iota
	priorHalf              // when the readings knew as much as the prior
	priorWhole             // when they knew nearly all, after priorHalf
	priorAtOnce            // likewise, without a look before
)

const (
	// halfKnown and wholeKnown are shares of the prior's variance which the readings have
	// taken away at the two looks. At the second the score of a prior off by 4 standard
	// deviations is 3.94 of the 4 at most.
	halfKnown  = 0.5
	wholeKnown = 31.0 / 32
	// patience is the number of readings after which less than wholeKnown is enough.
	patience = 64
	// halfShare is the part of the prior's level that the first look spends.
	halfShare = 0.2
)

// PriorLook tells whether, after n readings since the prior held, Prior is to be
// called: n is a power of 2, and the prior hasn't been settled yet.
func (t *Tally) PriorLook(n int) bool {
	return n > 0 && n&(n-1) == 0 && t.priorStage < priorWhole && !t.objections.has(PriorConflict)
}

// Prior looks at the prior after n readings since it held. shift is the posterior mean less
// the mean that the prior has at the same time, before the prior's variance at that
// time and after the posterior variance, in the quantity's unit and its square. Under the
// model
//
//	z = shift / sqrt(before - after)
//
// is N(0, 1), if the prior is normal: by the law of total variance before - after is the
// variance of the posterior mean (Box 1980, J. R. Statist. Soc. A 143, 383-430, for the
// check against the prior predictive, from memory).
//
// It is looked at twice at most: once the readings know as much as the prior,
// and once they know nearly all; in one look with all of the level if the first reading
// is as sharp as that. A prior of whose variance after isn't at most half, or
// without a variance, is not judged.
func (t *Tally) Prior(l *Law, n int, shift, before, after float64) {
	known := 1 - after/before
	if !(known >= halfKnown && known <= 1) || math.IsInf(before, 1) || !t.PriorLook(n) {
		return
	}
	switch whole := known >= wholeKnown || n >= patience; {
	case whole && t.priorStage == priorHalf:
		t.priorStage = priorWhole
	case whole:
		t.priorStage = priorAtOnce
	case t.priorStage == priorHalf:
		return
	default:
		t.priorStage = priorHalf
	}
	z := math.Abs(shift) / math.Sqrt(before-after)
	t.priorScore = float32(math.Copysign(math.Min(z, math.MaxFloat32), shift))
	if priorProbability(z) < t.priorStage.level(l) {
		t.objections.add(PriorConflict)
		t.raised++
	}
}

// Renewed has the prior begin anew: at a renewal.
func (t *Tally) Renewed() {
	t.priorScore, t.priorStage = 0, priorUnseen
	t.objections.remove(PriorConflict)
}

// level is the probability of error of the look: of the share of one year, since a prior
// is declared for a year or more.
func (s priorStage) level(l *Law) float64 {
	year := l.level(yearNanoseconds)
	switch s {
	case priorHalf:
		return halfShare * year
	case priorWhole:
		return (1 - halfShare) * year
	}
	return year
}
