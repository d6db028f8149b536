package posterior

// Level is a value of the measured quantity as the unevaluated sum Hi + Lo, in
// the quantity's unit: some 32 digits, so that neither a large ratio of value
// to uncertainty nor a long series of updates costs digits of the mean.
type Level struct{ Hi, Lo float64 }

// LevelOf returns x as a Level.
func LevelOf(x float64) Level { return Level{Hi: x} }

// Value rounds the level to a plain number.
func (l Level) Value() float64 { return l.Hi + l.Lo }

// Plus returns l + x; x is added with all its digits.
func (l Level) Plus(x float64) Level { return levelOf(l.pair().plus(pair{hi: x})) }

// Minus returns l - m, rounded once.
func (l Level) Minus(m Level) float64 { return l.pair().minus(m.pair()).value() }

// pair and levelOf change between the two names of the same thing.
func (l Level) pair() pair { return pair{l.Hi, l.Lo} }

func levelOf(p pair) Level { return Level{p.hi, p.lo} }
