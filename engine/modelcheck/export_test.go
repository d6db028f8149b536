package modelcheck

// What tests hold against tables.
var (
	SerialProbability = serialProbability
	NarrowProbability = narrowProbability
	WideProbability   = wideProbability
	TruncatedMoments  = truncatedMoments
	NormalBetween     = normalBetween
)

// Constants of the package.
const (
	Quartile   = quartile
	Shoulder   = shoulder
	Outlying   = outlying
	MaxLevel   = maxLevel
	Shares     = shares
	TallyBytes = tallyBytes
)

// Bounds returns where statistics are looked at closely.
func (l *Law) Bounds() (squareLow, squareHigh, lagHigh float64) {
	return l.squareLow, l.squareHigh, l.lagHigh
}
