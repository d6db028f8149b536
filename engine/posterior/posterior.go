package posterior

import "math"

// Form is the family of a distribution.
type Form uint8

const (
	FormNone    Form = iota // nothing is known
	FormNormal              // normal
	FormStudent             // Student t, shifted and scaled
	FormMixture             // normals mixed over r
	FormGrid                // a density held at points
)

// String returns the word of the interface.
func (f Form) String() string {
	switch f {
	case FormNormal:
		return "NORMAL"
	case FormStudent:
		return "STUDENT"
	case FormMixture:
		return "MIXTURE"
	case FormGrid:
		return "GRID"
	}
	return "NONE"
}

// Posterior is a distribution on the line: of the level or of the next
// indication. It is an immutable value; the zero value is FormNone, for which
// every number is NaN.
type Posterior struct {
	form     Form
	location Level
	scale    float64
	dof      float64
	shape    shape // of forms without a formula of their own

	logarithmic bool // all of it is of X, and the distribution is that of exp(X)
	momentless  bool // exp(X) has no moments, whatever the form says
	meanless    bool // likewise X has no mean
	sdless      bool // and no standard deviation
}

// shape is a distribution that is neither normal nor Student.
type shape interface {
	moments() (hasMean, hasSD bool) // Posterior's location and scale are the mean and standard deviation
	tail(x float64, s side) float64
	between(lo, hi float64) float64
	quantile(tail float64, s side) float64
}

// finer is a shape that takes points with more digits than a double has. width is
// hi - lo, rounded once.
type finer interface {
	tailAt(x pair, s side) float64
	betweenAt(lo, hi pair, width float64) float64
}

// Normal returns the normal distribution with the given mean and standard
// deviation > 0.
func Normal(mean Level, sd float64) Posterior {
	return Posterior{form: FormNormal, location: mean, scale: sd}
}

// Student returns the Student t distribution shifted to location, scaled by
// scale > 0, with dof > 0 degrees of freedom.
func Student(location Level, scale, dof float64) Posterior { return student(location, scale, dof) }

func student(location Level, scale, dof float64) Posterior {
	return Posterior{form: FormStudent, location: location, scale: scale, dof: dof}
}

// Form returns the family.
func (p Posterior) Form() Form { return p.form }

// Mean returns the mean, and whether it exists: Student t has none with one
// degree of freedom or fewer. See Exp for logarithmic scales.
func (p Posterior) Mean() (float64, bool) {
	if p.logarithmic {
		return p.exponentialMean()
	}
	mean, has := p.mean()
	return mean.Value(), has
}

// StandardDeviation returns the standard deviation, and whether it exists:
// scale sqrt(nu / (nu - 2)) for Student t with nu > 2 degrees of freedom, none
// up to 2 (JCGM 101:2008, 6.4.9.4). See Exp for logarithmic scales.
func (p Posterior) StandardDeviation() (float64, bool) {
	if p.logarithmic {
		return p.exponentialSD()
	}
	return p.sd()
}

// mean returns that of X, whatever the scale.
func (p Posterior) mean() (Level, bool) {
	if p.meanless {
		return p.location, false
	}
	switch p.form {
	case FormNormal:
		return p.location, true
	case FormStudent:
		return p.location, p.dof > 1
	case FormMixture, FormGrid:
		has, _ := p.shape.moments()
		return p.location, has
	}
	return LevelOf(math.NaN()), false
}

// sd returns the standard deviation of X, whatever the scale.
func (p Posterior) sd() (float64, bool) {
	switch {
	case p.sdless:
		return math.NaN(), false
	case p.form == FormNormal:
		return p.scale, true
	case p.form == FormStudent && p.dof > 2:
		return p.scale * math.Sqrt(p.dof/(p.dof-2)), true
	case p.shape != nil:
		_, has := p.shape.moments()
		return p.scale, has
	}
	return math.NaN(), false
}

// Location returns the centre of a normal or Student distribution, the mean of
// others.
func (p Posterior) Location() float64 {
	if p.form == FormNone {
		return math.NaN()
	}
	return p.location.Value()
}

// Scale returns the scale of a Student distribution, the standard deviation of
// a normal one; NaN for others.
func (p Posterior) Scale() float64 {
	if p.form == FormNormal || p.form == FormStudent {
		return p.scale
	}
	return math.NaN()
}

// DegreesOfFreedom returns those of a Student distribution; NaN for others.
func (p Posterior) DegreesOfFreedom() float64 {
	if p.form == FormStudent {
		return p.dof
	}
	return math.NaN()
}

// WithMoments returns p, of which the mean or the standard deviation don't exist where
// false is given: a blend at finitely many values of a learned r has both, the integral that it
// stands for need not.
func (p Posterior) WithMoments(mean, sd bool) Posterior {
	p.meanless, p.sdless = p.meanless || !mean, p.sdless || !sd
	return p
}

// WithStandardDeviation returns p, the standard deviation of X being sd: that of the integral
// for which a blend stands, of which its parts show less.
func (p Posterior) WithStandardDeviation(sd float64) Posterior {
	p.scale = sd
	return p
}

// LowerTail returns P(X < x), with full relative accuracy however small it is.
func (p Posterior) LowerTail(x float64) float64 { return p.tail(p.point(x), lower) }

// UpperTail returns P(X > x), with full relative accuracy however small it is.
func (p Posterior) UpperTail(x float64) float64 { return p.tail(p.point(x), upper) }

// tail returns the tail of X beyond x, whatever the scale.
func (p Posterior) tail(x pair, s side) float64 {
	switch p.form {
	case FormNormal:
		return normalTail(p.standard(x).towards(s))
	case FormStudent:
		return studentTail(p.standard(x).towards(s).value(), p.dof)
	case FormMixture, FormGrid:
		if f, ok := p.shape.(finer); ok {
			return f.tailAt(x, s)
		}
		return p.shape.tail(x.value(), s)
	}
	return math.NaN()
}

// Between returns P(lo <= X <= hi), 0 if hi <= lo, without cancellation where
// both limits lie on one side or close together.
func (p Posterior) Between(lo, hi float64) float64 {
	switch {
	case p.form == FormNone || math.IsNaN(lo) || math.IsNaN(hi):
		return math.NaN()
	case hi <= lo || p.logarithmic && hi <= 0:
		return 0
	}
	return p.between(p.point(lo), p.point(hi), p.breadth(lo, hi))
}

// between is Between for X, whatever the scale; width is hi - lo > 0.
func (p Posterior) between(lo, hi pair, width float64) float64 {
	switch p.form {
	case FormNormal:
		return normalBetween(p.standard(lo), p.standard(hi), width/p.scale)
	case FormStudent:
		return studentBetween(p.standard(lo).value(), p.standard(hi).value(), width/p.scale, p.dof)
	}
	if f, ok := p.shape.(finer); ok {
		return f.betweenAt(lo, hi, width)
	}
	return p.shape.between(lo.value(), hi.value())
}

// Quantile returns the x with P(X < x) = q, 0 < q < 1; the end of the scale, -Inf
// (0 if it is logarithmic) and +Inf, at 0 and 1; NaN outside.
func (p Posterior) Quantile(q float64) float64 {
	switch {
	case p.form == FormNone || !(q >= 0 && q <= 1):
		return math.NaN()
	case q == 0:
		return p.value(LevelOf(math.Inf(-1)))
	case q == 1:
		return math.Inf(1)
	case q <= 0.5:
		return p.value(p.quantile(q, lower))
	}
	return p.value(p.quantile(1-q, upper))
}

// Interval returns the probabilistically symmetric coverage interval: equal
// tails of (1 - coverage) / 2 (JCGM 101:2008, 3.12 and 7.7; JCGM 106:2012,
// 3.2.8). 0 < coverage < 1.
func (p Posterior) Interval(coverage float64) (lo, hi float64) {
	if p.form == FormNone || !(coverage > 0 && coverage < 1) {
		return math.NaN(), math.NaN()
	}
	tail := (1 - coverage) / 2
	switch p.form {
	case FormNormal:
		return p.around(-normalQuantile(tail))
	case FormStudent:
		return p.around(studentQuantile(tail, p.dof))
	}
	return p.value(p.quantile(tail, lower)), p.value(p.quantile(tail, upper))
}

// side names a tail.
type side int8

const (
	lower side = -1
	upper side = 1
)

// quantile returns the point of X that cuts off the tail probability, at most 1/2,
// on the given side.
func (p Posterior) quantile(tail float64, s side) Level {
	switch p.form {
	case FormNormal:
		return p.at(float64(s) * -normalQuantile(tail))
	case FormStudent:
		return p.at(float64(s) * studentQuantile(tail, p.dof))
	}
	return LevelOf(p.shape.quantile(tail, s))
}

// around returns the two points z scales away from the location.
func (p Posterior) around(z float64) (lo, hi float64) { return p.value(p.at(-z)), p.value(p.at(z)) }

// at returns the point of X z scales from the location.
func (p Posterior) at(z float64) Level {
	if math.IsInf(z, 0) {
		return LevelOf(z)
	}
	return p.location.Plus(z * p.scale)
}

// standard returns (x - location) / scale with more digits than a double has: the
// tail amplifies a relative error of z by z^2.
func (p Posterior) standard(x pair) pair {
	if math.IsInf(x.hi, 0) {
		return x
	}
	d := x.minus(p.location.pair())
	if q := d.hi / p.scale; math.IsInf(q, 0) {
		return pair{hi: q}
	}
	return d.over(p.scale)
}

// towards returns p, with its sign changed for the lower side.
func (p pair) towards(s side) pair {
	if s == lower {
		return p.negative()
	}
	return p
}

// negative changes the sign.
func (p pair) negative() pair { return pair{-p.hi, -p.lo} }
