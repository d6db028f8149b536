// Package modelcheck tells whether a belief is honest: whether readings fall where
// the belief had foretold. Everything is a pure function of numbers; nothing here changes a
// belief.
//
// # What it rests on
//
// Before a reading is taken in, the belief has a predictive distribution for it. If the
// model is right the probability integral transforms of successive readings are
// independent and uniform (Rosenblatt 1952; Dawid 1984; from memory), so their
// normal scores z (Score) are independent and N(0, 1), whatever the model. It holds on average over
// truths drawn from the prior, and with a flat prior at every truth.
//
// A displayed or censored reading only tells an interval of scores. It enters with E z
// and E z^2 given that interval, and in the coverage with the share of its transform
// within. By Jensen's inequality sums of these scatter less than those of the scores themselves, for
// every convex measure, so tests made for exact scores stay below their level, the
// more the coarser the display.
//
// # Laws
//
//  1. Readings are looked at in windows that don't overlap, each once, when it is full
//     (Settings.Window scored readings). Windows being independent, so are looks.
//
//  2. A look may spend probability in proportion to the time since the look before: each
//     of its three tests ObjectionsPerYear / 4 by the year, at most 0.01 / 4. Times of
//     readings must not depend on their values. A window read in no time can't object.
//     So how often is read doesn't matter: in T years the tests of a
//     correct model raise at most 3/4 ObjectionsPerYear T objections on average.
//
//  3. The remaining quarter, of one year, is for the prior: each prior has it once, in one or two
//     looks (Prior). With P priors, one more than there were renewals, a correct
//     model so raises ObjectionsPerYear (3 T + P) / 4 objections on average or less: what is
//     declared, where a prior lasts a year or longer.
//
//  4. The tests of a window are exact for exact scores: the sum of squares is
//     chi-squared, and the serial correlation, which no scale of the scores changes,
//     is independent of it. Probabilities keep a relative 1e-9 down to 1e-30.
//
//  5. An objection of a window stands until the next window is full, PRIOR_CONFLICT until the
//     prior is renewed. The result is the objection with the smallest probability relative to
//     its level; all are listed.
//
//  6. Steps are found by a two-sided CUSUM (Page 1954) on E z with k = 0.5, whose
//     threshold follows from FalseAlarmInterval by the integral equation of its run length. Both
//     sums restart at 0 after a detection.
//
//  7. A Tally after readings depends on their scores and times in canonical order and the Law, on
//     nothing else, to the bit, also through AppendBinary and DecodeTally.
package modelcheck
