// Package posterior holds the statistics of one quantity: how a belief about its
// true value follows from a prior and readings, and what can be read off it.
// Everything is a pure function of numbers: no clock, no randomness but of a fixed
// sequence (for wandering slopes in Passage), no state beyond the values it is given.
//
// # Model
//
// A reading is y = level + e with e ~ N(0, u^2), independent given the level. u is
// the reading's own random standard uncertainty or r, the repeatability standard
// deviation, which is known or learned. All values are in the quantity's unit.
//
//   - Constant: the level stays. What is known of it without r (the prior, readings
//     with their own u) is normal or flat: precisions add. With r known so is the
//     posterior. With r learned and a flat level it is Student t; with a
//     level known apart from r, the level being independent of r beforehand, it is a
//     mixture of normals over r. It isn't normal-inverse-gamma, whose prior
//     would grow and shrink with r.
//   - Walk: the level makes independent normal steps of given variance.
//   - Filter: the level stays, walks, has a slope, or reverts to a mean; readings may
//     share further errors, such as biases, that stay, wander or decay. All of
//     it is jointly normal. What isn't linear is for the caller to linearise, but for
//     a noise that grows with the level (White). Smooth is its fixed-interval smoother.
//   - Passage: when a level that goes on from a belief will first leave its limits.
//     Walks and trends are exact to 1e-9, other movements to 1e-3.
//
// # Laws
//
//  1. A belief is a function of prior, noise and the multiset of readings. In
//     another order the mean changes by less than 1e-12 of the standard
//     deviation (for a Constant; a Walk is a fold in the order of time). The same
//     order gives the same bits, also through AppendBinary and Decode.
//
//  2. A Constant whose r is known is never widened by a reading; a Walk is never
//     narrowed by a step.
//
//  3. Where nothing is known, or the joint posterior is improper (reference prior
//     before two distinct readings), the form is FormNone: no number is made up.
//     Moments that don't exist are reported so; quantiles and tails stay.
//
//  4. LowerTail and UpperTail keep a relative error below 1e-10 from 1 down to
//     1e-300 for the stored numbers, neither being 1 less the other where it is
//     small; normal ones 1e-14, Student 1e-12. Between doesn't cancel.
//
//  5. Level has some 32 digits, so that at value / standard deviation = 1e9 and
//     after 1e8 readings the mean is right to 1e-6 standard deviations.
//
//  6. Averaged over truths drawn from a proper prior the intervals cover what they
//     say; with a flat prior they do at every truth.
//
//  7. Inside these limits, which callers see to, nothing overflows into infinity
//     or NaN, and an answer costs at most some 20 000 points of an integrand,
//     mostly a few hundred:
//
//     - values, prior means, limits and thresholds of magnitude 1e100 at most;
//     - standard deviations and guesses from 1e-100 to 1e100;
//     - |value| / u and |value - prior mean| / prior standard deviation at most 1e150;
//     - Worth 0 (the reference prior) or from 1 to 1e9;
//     - coverage at most 1 - 1e-12.
//
//     Where worth is beyond 1e8 and readings conflict with the prior by hundreds
//     of orders of magnitude, a mixture keeps some 8 digits only.
//
//     For a Filter: coefficients about 1, or as large as a value where the state is a
//     relative error; times up to 1e10 seconds. Its standard deviations keep a relative
//     1e-11, its means 1e-9 standard deviations as long as no state becomes known more
//     than 1e7 times better than it was; a level read directly also beyond.
//
// A Filter's parts (Account) are independent and sum to the level's variance.
//
// Posteriors are immutable values that may be shared; normal and Student ones
// allocate nothing. A mixture costs some tens of microseconds to make and
// some microseconds a tail (more where the tail is below 1e-7): make it once per change of belief.
package posterior
