package engine_test

import (
	"math"
	"math/big"
	"time"

	"leadline.example/engine"
)

// The oracle of joint beliefs: the covariance of the level and of all readings,
// written down pair by pair from what is declared, and conditioned in 120-digit
// arithmetic. It shares no code with the engine, filters nothing, and knows no
// state: two readings covary by what they have in common.

const oracleBits = 400

func num(x float64) *big.Float { return new(big.Float).SetPrec(oracleBits).SetFloat64(x) }
func zero() *big.Float         { return num(0) }

func plus(all ...*big.Float) *big.Float {
	sum := zero()
	for _, x := range all {
		sum.Add(sum, x)
	}
	return sum
}

func minus(a, b *big.Float) *big.Float { return zero().Sub(a, b) }
func over(a, b *big.Float) *big.Float  { return zero().Quo(a, b) }

func times(all ...*big.Float) *big.Float {
	product := num(1)
	for _, x := range all {
		product.Mul(product, x)
	}
	return product
}

// expNegative returns exp(-x) for x >= 0: by halving x until the Taylor series is
// short, and squaring back.
func expNegative(x *big.Float) *big.Float {
	halvings := max(0, x.MantExp(nil)+20)
	small := zero().SetMantExp(x, -halvings)
	sum, term := num(1), num(1)
	for n := 1; n < 60; n++ {
		term = over(times(term, small), num(-float64(n)))
		sum = plus(sum, term)
	}
	for range halvings {
		sum = times(sum, sum)
	}
	return sum
}

// seconds between two instants.
func between(from, to engine.Instant) *big.Float {
	return over(num(0).SetInt64(int64(to-from)), num(1e9))
}

func earlier(a, b engine.Instant) engine.Instant { return min(a, b) }

// oracle is what is declared, and the readings applied.
type oracle struct {
	d           engine.Declaration
	instruments map[engine.InstrumentID]engine.InstrumentDeclaration
	renewals    []engine.Renewal // in force, by time
	readings    []engine.Reading // in canonical order
}

// epoch is a part's life: what the level starts from, and when.
type epoch struct {
	number   int
	from     engine.Instant
	mean, sd float64
	slope    engine.Slope
}

// vagueSD stands for a flat prior: so far beyond all data that what it adds
// lies behind the 35th digit.
const vagueSD = 1e20

func (o *oracle) start(p engine.Prior) (mean, sd float64) {
	switch {
	case p.Form == engine.PriorNormal:
		return p.Mean, p.StandardDeviation
	case o.d.Dynamics.Form == engine.DynamicsMeanReverting:
		return o.d.Dynamics.Mean, o.d.Dynamics.StandardDeviation
	}
	return 0, vagueSD
}

// epoch returns the part's life at an instant, where first is that of the
// first reading.
func (o *oracle) epoch(at, first engine.Instant) epoch {
	e := epoch{from: first, slope: o.d.Dynamics.Slope}
	e.mean, e.sd = o.start(o.d.Prior)
	if o.d.Prior.HasTime {
		e.from = o.d.Prior.Time
	}
	for i, r := range o.renewals {
		if r.Time <= at {
			e = epoch{number: i + 1, from: r.Time, slope: o.d.Dynamics.Slope}
			e.mean, e.sd = o.start(r.Prior)
			if r.HasSlope {
				e.slope = r.Slope
			}
		}
	}
	return e
}

func (o *oracle) perSecond(s float64, per time.Duration) *big.Float {
	if per == 0 {
		return zero()
	}
	return over(times(num(s), num(s)), between(0, engine.Instant(per)))
}

// levelMean returns the mean of the level at an instant before any reading.
func (o *oracle) levelMean(at, first engine.Instant) *big.Float {
	e := o.epoch(at, first)
	h := between(e.from, at)
	switch y := o.d.Dynamics; y.Form {
	case engine.DynamicsLinearTrend:
		return plus(num(e.mean), times(over(num(e.slope.Mean), between(0, engine.Instant(e.slope.Per))), h))
	case engine.DynamicsMeanReverting:
		return plus(num(y.Mean), times(minus(num(e.mean), num(y.Mean)), o.left(h)))
	}
	return num(e.mean)
}

// left returns what is left of a deviation from the mean after h seconds.
func (o *oracle) left(h *big.Float) *big.Float {
	ln2, _ := new(big.Float).SetPrec(oracleBits).SetString("0.69314718055994530941723212145817656807550013436025525412068000949339362196969471560586332699641868754200148102")
	return expNegative(times(ln2, over(h, between(0, engine.Instant(o.d.Dynamics.HalfLife)))))
}

// levelCovariance returns the covariance of the level at two instants.
func (o *oracle) levelCovariance(s, t, first engine.Instant) *big.Float {
	e, f := o.epoch(s, first), o.epoch(t, first)
	if e.number != f.number {
		return zero()
	}
	a, b := between(e.from, earlier(s, t)), between(e.from, max(s, t))
	variance := times(num(e.sd), num(e.sd))
	switch y := o.d.Dynamics; y.Form {
	case engine.DynamicsRandomWalk:
		return plus(variance, times(o.perSecond(y.StandardDeviation, y.Per), a))
	case engine.DynamicsLinearTrend:
		slope := over(num(e.slope.StandardDeviation), between(0, engine.Instant(e.slope.Per)))
		wander := zero()
		if y.Wander.Per > 0 { // per second, of a slope per y.Slope.Per
			unit := between(0, engine.Instant(y.Slope.Per))
			wander = over(o.perSecond(y.Wander.StandardDeviation, y.Wander.Per), times(unit, unit))
		}
		// The integral of a Wiener process: a^3/3 + a^2 (b - a)/2.
		integrated := plus(over(times(a, a, a), num(3)), over(times(a, a, minus(b, a)), num(2)))
		return plus(variance, times(slope, slope, a, b), times(o.perSecond(y.StandardDeviation, y.Per), a), times(wander, integrated))
	case engine.DynamicsMeanReverting:
		both := times(o.left(a), o.left(b))
		stationary := times(num(y.StandardDeviation), num(y.StandardDeviation))
		return plus(times(variance, both), times(stationary, minus(o.left(minus(b, a)), both)))
	}
	return variance
}

// calibration returns the one that a reading rests on; -1 for none.
func calibration(d engine.InstrumentDeclaration, at engine.Instant) int {
	n := -1
	for i := range d.Calibrations {
		if i == 0 || d.Calibrations[i].ValidFrom <= at {
			n = i
		}
	}
	return n
}

// occasions numbers the occasions of an instrument in canonical order.
func (o *oracle) occasions() []int {
	numbers := make([]int, len(o.readings))
	last := map[engine.InstrumentID]int{}
	for i := range o.readings {
		r := &o.readings[i]
		before, met := last[r.Instrument]
		numbers[i] = i
		if met && r.Occasion != "" && o.readings[before].Occasion == r.Occasion {
			numbers[i] = numbers[before]
		}
		last[r.Instrument] = i
	}
	return numbers
}

// offset is the declared bias of a reading.
func (o *oracle) offset(r *engine.Reading) float64 {
	d, ok := o.instruments[r.Instrument]
	if n := calibration(d, r.Time); ok && n >= 0 {
		return d.Calibrations[n].Bias
	}
	return 0
}

// white returns the variance of a reading's own error.
func (o *oracle) white(r *engine.Reading) *big.Float {
	d, ok := o.instruments[r.Instrument]
	s := o.d.Repeatability.StandardDeviation
	if ok && d.Repeatability.StandardDeviation > 0 {
		s = d.Repeatability.StandardDeviation
	}
	if r.HasUncertainty {
		s = r.RandomStandardUncertainty
	}
	return plus(times(num(s), num(s)), over(times(num(d.Resolution), num(d.Resolution)), num(12)))
}

// errorCovariance returns what two readings share apart from the level.
func (o *oracle) errorCovariance(i, j int, occasions []int) *big.Float {
	a, b := &o.readings[i], &o.readings[j]
	sum := zero()
	if i == j {
		sum = o.white(a)
	}
	d, ok := o.instruments[a.Instrument]
	e, alsoOK := o.instruments[b.Instrument]
	if !ok || !alsoOK {
		return sum
	}
	m, n := calibration(d, a.Time), calibration(e, b.Time)
	if m >= 0 && n >= 0 {
		c, f := d.Calibrations[m], e.Calibrations[n]
		if c.Reference != "" && c.Reference == f.Reference {
			sum = plus(sum, times(num(c.CommonStandardUncertainty), num(f.CommonStandardUncertainty)))
		}
		if a.Instrument == b.Instrument && m == n {
			u := c.BiasStandardUncertainty
			own := minus(times(num(u), num(u)), times(num(c.CommonStandardUncertainty), num(c.CommonStandardUncertainty)))
			age := between(c.ValidFrom, max(c.ValidFrom, earlier(a.Time, b.Time)))
			sum = plus(sum, own, times(o.perSecond(c.DriftStandardDeviation, c.DriftPer), age))
		}
	}
	if a.Instrument != b.Instrument {
		return sum
	}
	if c := d.Repeatability.Correlated; c.StandardDeviation > 0 {
		h := between(earlier(a.Time, b.Time), max(a.Time, b.Time))
		sum = plus(sum, times(num(c.StandardDeviation), num(c.StandardDeviation), expNegative(over(h, between(0, engine.Instant(c.Time))))))
	}
	if s := d.Repeatability.BetweenOccasions; s > 0 && occasions[i] == occasions[j] {
		sum = plus(sum, times(num(s), num(s)))
	}
	return sum
}

// level returns mean and standard deviation of the level at an instant after all
// readings: the normal conditioned on them, by a Cholesky factor of their covariance.
func (o *oracle) level(at engine.Instant) (mean *big.Float, sd float64) {
	first := at
	if len(o.readings) > 0 {
		first = min(first, o.readings[0].Time)
	}
	n := len(o.readings)
	occasions := o.occasions()
	factor := make([][]*big.Float, n)
	residual, cross := make([]*big.Float, n), make([]*big.Float, n) // L^-1 of both
	mean = o.levelMean(at, first)
	variance := o.levelCovariance(at, at, first)
	for i := range n {
		r := &o.readings[i]
		factor[i] = make([]*big.Float, i+1)
		for j := range i + 1 {
			sum := plus(o.levelCovariance(r.Time, o.readings[j].Time, first), o.errorCovariance(i, j, occasions))
			for k := range j {
				sum = minus(sum, times(factor[i][k], factor[j][k]))
			}
			if i == j {
				factor[i][i] = zero().Sqrt(sum)
			} else {
				factor[i][j] = over(sum, factor[j][j])
			}
		}
		residual[i] = minus(minus(num(r.Value), num(o.offset(r))), o.levelMean(r.Time, first))
		cross[i] = o.levelCovariance(r.Time, at, first)
		for k := range i {
			residual[i] = minus(residual[i], times(factor[i][k], residual[k]))
			cross[i] = minus(cross[i], times(factor[i][k], cross[k]))
		}
		residual[i], cross[i] = over(residual[i], factor[i][i]), over(cross[i], factor[i][i])
		mean = plus(mean, times(residual[i], cross[i]))
		variance = minus(variance, times(cross[i], cross[i]))
	}
	v, _ := variance.Float64()
	return mean, math.Sqrt(v)
}
