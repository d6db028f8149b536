package posterior

import "math"

// Strata splits a bias into narrower ones, of standard deviations at most sd > 0, which
// mixed by the weights are b: for u = b.SD and a share d of it,
//
//	N(B, u^2) = sum of w_k N(B + k d u, d^2 u^2),  w_k ~ exp(-k^2 d^2 / (2 (1 - d^2)))
//
// to 2 exp(-2 pi^2 (1 - d^2)), 1e-4 for d = 0.7 and less below (Poisson summation, as
// for lattice; derived for this package). A level that walks and is read with a bias
// wider than the noise is served by a Grid for each stratum: what a Grid neglects of the
// bias, it neglects of one so narrow; the evidence of each adds to its weight, and Blend
// joins their answers. A bias no wider than sd is returned as it is, with weight 1.
func (b Bias) Strata(sd float64) (parts []Bias, logWeights []float64) {
	if b.SD <= sd {
		return []Bias{b}, []float64{0}
	}
	share := min(sd/b.SD, 0.7)
	left := 1 - share*share
	most := int(math.Ceil(7 * math.Sqrt(left) / share))
	scale := math.Log(share / math.Sqrt(2*math.Pi*left))
	for k := -most; k <= most; k++ {
		at := float64(k) * share
		parts = append(parts, Bias{b.Mean + at*b.SD, share * b.SD})
		logWeights = append(logWeights, scale-at*at/2/left)
	}
	return parts, logWeights
}
