package engine_test

import (
	"cmp"
	"math"

	"gonum.org/v1/gonum/floats"

	"leadline.example/engine"
)

// The oracle of beliefs from displayed, censored and outlying readings: numerical integration
// of prior times likelihood for each of many r, and over ln r by Gauss-Legendre panels. A
// level that stays is written down at once and scanned for where it matters; one
// that moves is a density on a lattice of bias and eta = level + bias, both dense,
// moved by its exact transition and multiplied by what each reading says. It shares
// no code with the engine, knows no counts, no layers and no filter, and the bias has
// a dimension of its own.

// blurred is what a reading says of eta, on the scale of the level.
type blurred struct {
	lower, upper float64
	sd           float64 // its own; 0: r / sqrt(samples)
	samples      float64
	widened      float64 // times that
	outliers     engine.Outliers
}

// dense is what is declared, and the readings applied.
type dense struct {
	d        engine.Declaration
	by       *engine.InstrumentDeclaration // that all readings are by; nil: by none
	renewals []engine.Renewal              // in force, by time
	readings []engine.Reading              // by time
	outlier  int                           // the reading that is known to be one, from 1; 0: none is
	widened  int                           // the reading after which the level was less known by d.StepDetection.Widen, from 1; 0: none
	fineness float64                       // of the lattices; 0 counts as 1
}

// scaled returns a value on the scale of the level.
func (o *dense) scaled(x float64) float64 {
	switch {
	case o.d.Scale != engine.ScaleLog:
		return x
	case x <= 0:
		return math.Inf(-1)
	}
	return math.Log(x)
}

// says returns what reading number i says.
func (o *dense) says(i int) blurred {
	r := &o.readings[i]
	y := blurred{lower: r.Value, upper: r.Value, samples: samples(r), widened: 1, outliers: o.d.Outliers}
	switch r.Extent {
	case engine.ExtentAbove:
		y.upper = math.Inf(1)
	case engine.ExtentBelow:
		y.lower = math.Inf(-1)
	case engine.ExtentBetween:
		y.upper = r.Upper
	}
	if o.by != nil {
		y.lower, y.upper = o.shown(y.lower, y.upper)
	}
	y.lower, y.upper = o.scaled(y.lower), o.scaled(y.upper)
	switch learned, _ := o.learned(); {
	case r.HasUncertainty:
		y.sd = r.RandomStandardUncertainty
	case o.by != nil && o.by.Repeatability.StandardDeviation > 0:
		y.sd = o.by.Repeatability.StandardDeviation / math.Sqrt(y.samples)
	case !learned:
		y.sd = o.d.Repeatability.StandardDeviation / math.Sqrt(y.samples)
	}
	if o.outlier == i+1 {
		y.widened, y.outliers = o.d.Outliers.Inflation, engine.Outliers{}
	}
	return y
}

// shown returns the ends of what a displayed value or an interval stands for: one that lies
// beyond the measuring interval says no more than that.
func (o *dense) shown(lower, upper float64) (float64, float64) {
	in, half := &o.by.MeasuringInterval, o.by.Resolution/2
	switch {
	case in.HasUpper && lower > in.Upper:
		return in.Upper, math.Inf(1)
	case in.HasLower && upper < in.Lower:
		return math.Inf(-1), in.Lower
	case lower == upper:
		return lower - half, upper + half
	}
	return lower, upper
}

// learned tells whether r is, and what is known of it.
func (o *dense) learned() (bool, engine.Repeatability) {
	if o.by != nil && o.by.Repeatability.Learned.Learned() {
		return true, o.by.Repeatability.Learned
	}
	return o.d.Repeatability.Learned(), o.d.Repeatability
}

// noise returns the white noise under r.
func (y *blurred) noise(r float64) float64 {
	if y.sd > 0 {
		return y.widened * y.sd
	}
	return y.widened * r / math.Sqrt(y.samples)
}

// log is ln of what the reading says of eta under r.
func (y *blurred) log(eta, r float64) float64 {
	sd, p := y.noise(r), y.outliers.Probability
	if p == 0 {
		return y.normal(eta, sd)
	}
	usual, outlying := math.Log1p(-p)+y.normal(eta, sd), math.Log(p)+y.normal(eta, sd*y.outliers.Inflation)
	return logPlus(usual, outlying)
}

func (y *blurred) normal(eta, sd float64) float64 {
	if y.lower == y.upper {
		z := (y.lower - eta) / sd
		return -z*z/2 - math.Log(sd) - math.Log(2*math.Pi)/2
	}
	return math.Max(logNormalMass((y.lower-eta)/sd, (y.upper-eta)/sd), -1e200)
}

// beyond returns the probabilities that the indication is below lower and above upper.
func (y *blurred) beyond(eta, r float64) (below, above float64) {
	for k, share := range [...]float64{1 - y.outliers.Probability, y.outliers.Probability} {
		if share == 0 {
			continue
		}
		sd := y.noise(r)
		if k == 1 {
			sd *= y.outliers.Inflation
		}
		below += share * math.Erfc((eta-y.lower)/sd/math.Sqrt2) / 2
		above += share * math.Erfc((y.upper-eta)/sd/math.Sqrt2) / 2
	}
	return below, above
}

func logPlus(a, b float64) float64 {
	top := math.Max(a, b)
	if math.IsInf(top, -1) {
		return top
	}
	return top + math.Log1p(math.Exp(math.Min(a, b)-top))
}

// logBeyond is ln P(Z > z): by erfc, far out by the asymptotic series (DLMF 7.12.1).
func logBeyond(z float64) float64 {
	if z < 30 {
		return math.Log(math.Erfc(z/math.Sqrt2) / 2)
	}
	q := 1 / (z * z)
	return -z*z/2 - math.Log(z) - math.Log(2*math.Pi)/2 + math.Log1p(-q+3*q*q-15*q*q*q)
}

// logNormalMass is ln P(a < Z < b).
func logNormalMass(a, b float64) float64 {
	if a+b < 0 {
		a, b = -b, -a
	}
	if a < -3 {
		return math.Log1p(-math.Exp(logBeyond(-a)) - math.Exp(logBeyond(b)))
	}
	if (b-a)*math.Max(1, b) < 1e-4 { // the density in the middle
		m := (a + b) / 2
		return math.Log(b-a) - m*m/2 - math.Log(2*math.Pi)/2
	}
	near := logBeyond(a)
	return near + math.Log(-math.Expm1(logBeyond(b)-near))
}

// start returns mean and standard deviation that a prior stands for on the scale of the level.
func (o *dense) start(p engine.Prior) (mean, sd float64, flat bool) {
	switch p.Form {
	case engine.PriorInterval:
		lo, hi := o.scaled(p.Low), o.scaled(p.High)
		return (lo + hi) / 2, (hi - lo) / 2 / (math.Sqrt2 * math.Erfinv(p.Probability)), false
	case engine.PriorNormal:
		if o.d.Scale == engine.ScaleLog {
			variance := math.Log(1 + p.StandardDeviation*p.StandardDeviation/p.Mean/p.Mean)
			return math.Log(p.Mean) - variance/2, math.Sqrt(variance), false
		}
		return p.Mean, p.StandardDeviation, false
	}
	if y := &o.d.Dynamics; y.Form == engine.DynamicsMeanReverting {
		return o.scaled(y.Mean), y.StandardDeviation, false
	}
	return 0, 0, true
}

// bias returns the calibration in force at an instant, with mean and standard deviation of
// its bias.
func (o *dense) bias(at engine.Instant) (number int, mean, sd float64) {
	if o.by == nil {
		return -1, 0, 0
	}
	n := calibration(*o.by, at)
	if n < 0 {
		return -1, 0, 0
	}
	return n, o.by.Calibrations[n].Bias, o.by.Calibrations[n].BiasStandardUncertainty
}

// life returns the number of the level's life at an instant, and its prior.
func (o *dense) life(at engine.Instant) (int, engine.Prior) {
	n := 0
	for n < len(o.renewals) && o.renewals[n].Time <= at {
		n++
	}
	if n == 0 {
		return 0, o.d.Prior
	}
	return n, o.renewals[n-1].Prior
}

// hull returns the ends of all finite ends of readings, and the widest noise under r.
func (o *dense) hull(r float64) (lo, hi, widest float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	for i := range o.readings {
		y := o.says(i)
		for _, x := range [...]float64{y.lower, y.upper} {
			if !math.IsInf(x, 0) {
				lo, hi = math.Min(lo, x), math.Max(hi, x)
			}
		}
		widest = math.Max(widest, y.noise(r)*math.Max(1, y.outliers.Inflation))
	}
	return lo, hi, widest
}

// given returns the level at an instant under r; nil if nothing is known of it.
func (o *dense) given(r float64, at engine.Instant) *tabled {
	if o.d.Dynamics.Form == engine.DynamicsConstant {
		return o.still(r, at)
	}
	return o.moving(r, at)
}

// mixed is the level's distribution: one for each r.
type mixed struct {
	weights, r []float64
	parts      []*tabled
	log        float64
}

// belief returns the level at an instant; nil if nothing is known of it.
func (o *dense) belief(at engine.Instant) *mixed {
	learned, known := o.learned()
	if !learned {
		t := o.given(1, at)
		if t == nil {
			return nil
		}
		return &mixed{[]float64{1}, []float64{1}, []*tabled{t}, t.log}
	}
	log := func(u float64) float64 {
		t := o.given(math.Exp(u), at)
		if t == nil {
			return math.Inf(-1)
		}
		return t.log + logPriorOf(known, u)
	}
	lo, hi, ok := o.bracket(known, log)
	if !ok {
		return nil
	}
	panels := max(7, int((hi-lo)/0.8)) // where few readings bound r, its density falls slowly
	if o.fineness > 1 {
		panels *= 2
	}
	return o.integrate(known, at, lo, hi, panels)
}

// logPriorOf is ln of the prior's density of u = ln r, see learnedOracle.logPrior.
func logPriorOf(known engine.Repeatability, u float64) float64 {
	if known.Form == engine.RepeatabilityLearnedReference {
		return 0
	}
	q := known.Guess * math.Exp(-u)
	return -known.Worth * (u - math.Log(known.Guess) + q*q/2)
}

// bracket returns the ends of ln r beyond which its density is e^-30 of the highest.
func (o *dense) bracket(known engine.Repeatability, log func(float64) float64) (lo, hi float64, ok bool) {
	const drop, farthest = 30, 60
	floor := math.Inf(-1)
	if known.Floor > 0 {
		floor = math.Log(known.Floor)
	}
	from := math.Log(cmp.Or(known.Guess, known.Floor, 1))
	from = math.Max(from, floor)
	lo, hi, ok = climb(log, from, 0.6, floor, drop, farthest)
	if !ok {
		return 0, 0, false
	}
	lo, hi, _ = climb(log, (lo+hi)/2, (hi-lo)/14, math.Max(lo, floor), drop, hi-lo)
	return lo, hi, true
}

// climb goes from a place in steps both ways until the density has fallen by drop.
func climb(log func(float64) float64, from, step, floor, drop, farthest float64) (lo, hi float64, ok bool) {
	top := log(from)
	values := map[float64]float64{from: top}
	for _, way := range [...]float64{1, -1} {
		for n := 1.0; n*step <= farthest; n++ {
			u := math.Max(from+way*n*step, floor)
			v := log(u)
			values[u], top = v, math.Max(top, v)
			if v < top-drop || u == floor {
				break
			}
		}
	}
	if math.IsInf(top, -1) {
		return 0, 0, false
	}
	lo, hi = math.Inf(1), math.Inf(-1)
	for u, v := range values {
		if v > top-drop {
			lo, hi = math.Min(lo, u), math.Max(hi, u)
		}
	}
	return math.Max(lo-step, floor), hi + step, true
}

// integrate sums over ln r by five-point Gauss-Legendre panels (DLMF 3.5(v)).
func (o *dense) integrate(known engine.Repeatability, at engine.Instant, lo, hi float64, panels int) *mixed {
	nodes := [...]float64{-0.9061798459386640, -0.5384693101056831, 0, 0.5384693101056831, 0.9061798459386640}
	shares := [...]float64{0.2369268850561891, 0.4786286704993665, 0.5688888888888889, 0.4786286704993665, 0.2369268850561891}
	m := &mixed{}
	var logs []float64
	half := (hi - lo) / float64(panels) / 2
	for p := range panels {
		for k, x := range nodes {
			u := lo + half*(float64(2*p)+1+x)
			t := o.given(math.Exp(u), at)
			m.r, m.parts = append(m.r, math.Exp(u)), append(m.parts, t)
			logs = append(logs, t.log+logPriorOf(known, u)+math.Log(half*shares[k]))
		}
	}
	top := floats.Max(logs)
	for _, v := range logs {
		m.weights = append(m.weights, math.Exp(v-top))
	}
	sum := floats.Sum(m.weights)
	floats.Scale(1/sum, m.weights)
	m.log = top + math.Log(sum)
	return m
}

func (m *mixed) sum(of func(*tabled) float64) float64 {
	s := 0.0
	for i, w := range m.weights {
		s += w * of(m.parts[i])
	}
	return s
}

// tail returns the probability beyond x on a side, -1 or 1.
func (m *mixed) tail(x float64, side int) float64 {
	return m.sum(func(t *tabled) float64 { return t.tail(x, side) })
}

// moments returns mean and standard deviation.
func (m *mixed) moments() (mean, sd float64) {
	mean = m.sum(func(t *tabled) float64 { return t.mean })
	variance := m.sum(func(t *tabled) float64 { return t.square - t.mean*t.mean + (t.mean-mean)*(t.mean-mean) })
	return mean, math.Sqrt(variance)
}

// foretold returns the probabilities that an indication falls below and above what a
// reading at that instant says, for a level read without a bias.
func (m *mixed) foretold(y *blurred) (below, above float64) {
	for i, w := range m.weights {
		t := m.parts[i]
		step := t.x[1] - t.x[0]
		for k, x := range t.x {
			lo, hi := y.beyond(x, m.r[i])
			below += w * step * t.density[k] * lo
			above += w * step * t.density[k] * hi
		}
	}
	return below, above
}
