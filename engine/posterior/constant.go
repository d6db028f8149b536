package posterior

import "math"

// Constant holds what the readings of a quantity that does not move say of it.
// The zero value is "no reading yet". It keeps sums that no order of arrival
// can change but by rounding in the 30th digit, each relative to an origin that
// is itself a reading, so that no sum is much larger than what it is used for:
// with an origin among the readings, the sum of squares about the mean is at
// least the n-th part of the sum of squares about the origin, whatever the
// readings are (Cauchy-Schwarz over the other n - 1), and the subtraction that
// leads from one to the other costs no more than log10(n) of 32 digits.
type Constant struct {
	known   weighted
	learned squares
}

// weighted sums readings of known standard deviation u, weight 1/u^2.
type weighted struct {
	count  int64
	origin float64
	weight pair // sum of w
	moment pair // sum of w (y - origin)
}

// squares sums readings that inform r.
type squares struct {
	count  int64
	origin float64
	sum    pair // sum of y - origin
	square pair // sum of (y - origin)^2
}

// AddKnown adds a reading y whose random standard deviation is known: its own
// u, or the quantity's r. |y| <= 1e100, 1e-100 <= u <= 1e100, |y| / u <= 1e150.
func (c *Constant) AddKnown(y, u float64) {
	k := &c.known
	if k.count == 0 {
		k.origin = y
	}
	k.count++
	w := 1 / (u * u)
	k.weight = k.weight.plus(pair{hi: w})
	k.moment = k.moment.plus(twoDiff(y, k.origin).times(w))
}

// AddLearned adds a reading y that informs a learned r. |y| <= 1e100.
func (c *Constant) AddLearned(y float64) {
	l := &c.learned
	if l.count == 0 {
		l.origin = y
	}
	l.count++
	d := twoDiff(y, l.origin)
	l.sum = l.sum.plus(d)
	l.square = l.square.plus(d.squared())
}

// Count returns the number of readings added.
func (c *Constant) Count() int { return int(c.known.count + c.learned.count) }

// mean of the readings that inform r; there is at least one.
func (s *squares) mean() Level {
	return levelOf(s.sum.over(float64(s.count)).plus(pair{hi: s.origin}))
}

// deviation returns S, the sum of squares about the mean: 0 if and only if all
// readings are equal.
func (s *squares) deviation() float64 {
	if s.count < 2 {
		return 0
	}
	return s.square.minus(s.sum.squared().over(float64(s.count))).value()
}

// normal is what is known of the level without the readings that inform r:
// flat, or normal with mean and sd.
type normal struct {
	flat bool
	mean Level
	sd   float64
}

// informed joins the prior and the readings of known standard deviation:
// precisions add, the mean is the precision-weighted mean (Gelman et al. 2013,
// 2.5, equations 2.9 to 2.12).
func (c *Constant) informed(p Prior, n Noise) normal {
	total := c.known
	if n.Known && c.learned.count > 0 {
		total.join(c.learned.mean(), float64(c.learned.count)/(n.SD*n.SD))
	}
	if !p.Vague {
		total.join(LevelOf(p.Mean), 1/(p.SD*p.SD))
	}
	if total.weight.hi == 0 {
		return normal{flat: true}
	}
	offset := total.moment.ratio(total.weight)
	return normal{
		mean: levelOf(offset.plus(pair{hi: total.origin})),
		sd:   1 / math.Sqrt(total.weight.value()),
	}
}

// join adds a further value of weight w.
func (k *weighted) join(y Level, w float64) {
	if k.weight.hi == 0 {
		k.origin = y.Hi
	}
	k.weight = k.weight.plus(pair{hi: w})
	k.moment = k.moment.plus(y.pair().minus(pair{hi: k.origin}).times(w))
}

// spread is what is known of a learned r apart from the level: exponent and
// sum of squares of a scaled inverse chi-squared, n readings with their mean.
type spread struct {
	n     float64
	mean  Level
	worth float64 // degrees of freedom without the level's: Worth + n - 1, or Worth
	sum   float64 // Worth Guess^2 + S
}

// spread reports false if nothing can be said: under the reference prior until
// two distinct readings exist (1/r times the likelihood of equal readings is
// not integrable at r = 0).
func (c *Constant) spread(n Noise) (spread, bool) {
	l := &c.learned
	s := spread{n: float64(l.count), worth: n.Worth, sum: n.Worth * n.Guess * n.Guess}
	if l.count > 0 {
		deviation := l.deviation()
		if n.Worth == 0 && !(deviation > 0) {
			return s, false
		}
		s.mean = l.mean()
		s.worth += s.n - 1
		s.sum += deviation
	}
	return s, s.worth > 0 && s.sum > 0
}

// Posterior returns the distribution of the level given the readings added.
//
// Flat level and r learned from n readings with mean m and sum of squares S
// about it: exactly Student t with Worth + n - 1 degrees of freedom, location m
// and scale^2 = (Worth Guess^2 + S) / ((Worth + n - 1) n) (Gelman et al. 2013,
// 3.2 and 3.3; JCGM 101:2008, 6.4.9 for Worth 0). A level known apart from
// those readings makes it a mixture; see mixture.
func (c *Constant) Posterior(p Prior, n Noise) Posterior {
	level := c.informed(p, n)
	if !n.learned() {
		return level.posterior(0)
	}
	if c.learned.count == 0 {
		if n.Worth == 0 && c.known.count == 0 {
			return Posterior{}
		}
		return level.posterior(0)
	}
	s, ok := c.spread(n)
	if !ok {
		return Posterior{}
	}
	if level.flat {
		return student(s.mean, math.Sqrt(s.sum/s.worth/s.n), s.worth)
	}
	return newMixture(level, s, false)
}

// Predictive returns the distribution of the next indication whose random part
// is r; FormNone if r is absent or undetermined, or nothing is known of the
// level. For a flat level it is Student t with scale^2 = (Worth Guess^2 + S)
// (1 + 1/n) / (Worth + n - 1) (Gelman et al. 2013, 3.2).
func (c *Constant) Predictive(p Prior, n Noise) Posterior {
	if n.Absent {
		return Posterior{}
	}
	level := c.informed(p, n)
	if n.Known {
		return level.posterior(n.SD)
	}
	s, ok := c.spread(n)
	switch {
	case !ok:
		return Posterior{}
	case !level.flat:
		return newMixture(level, s, true)
	case s.n == 0:
		return Posterior{}
	}
	return student(s.mean, math.Sqrt(s.sum/s.worth*(1+1/s.n)), s.worth)
}

// posterior publishes what is known of the level, widened by a further
// independent standard deviation.
func (k normal) posterior(further float64) Posterior {
	if k.flat {
		return Posterior{}
	}
	return Posterior{form: FormNormal, location: k.mean, scale: math.Hypot(k.sd, further)}
}
