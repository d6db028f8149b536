package engine_test

import (
	"math"

	"gonum.org/v1/gonum/floats"

	"leadline.example/engine"
)

// still returns a constant level under r: in each life prior times likelihood, with every
// bias integrated out,
//
//	p(level) ~ prior(level) product over calibrations of integral L(level + b) N(b; mean, u) db
func (o *dense) still(r float64, at engine.Instant) *tabled {
	asked, _ := o.life(at)
	lives := make([][]int, len(o.renewals)+1)
	for i := range o.readings {
		n, _ := o.life(o.readings[i].Time)
		lives[n] = append(lives[n], i)
	}
	var level *tabled
	log := 0.0
	for n, members := range lives {
		if n > 0 && o.by != nil && len(o.by.Calibrations) > 0 {
			panic("a level that stays, renewed, under a bias")
		}
		prior := o.d.Prior
		if n > 0 {
			prior = o.renewals[n-1].Prior
		}
		if _, _, flat := o.start(prior); len(members) == 0 && (n != asked || flat) {
			continue
		}
		t := o.alive(r, members, prior)
		log += t.log
		if n == asked {
			level = t
		}
	}
	if level != nil {
		level.log = log
	}
	return level
}

// alive returns one life of a constant level.
func (o *dense) alive(r float64, members []int, prior engine.Prior) *tabled {
	groups := o.grouped(members)
	mean, sd, flat := o.start(prior)
	own := func(x float64) float64 {
		if flat {
			return 0
		}
		z := (x - mean) / sd
		return -z*z/2 - math.Log(sd) - math.Log(2*math.Pi)/2
	}
	lo, hi, widest := o.hull(r)
	margin := 14 * widest
	if !flat {
		margin = 14 * math.Min(widest, sd)
	}
	lo, hi = lo-margin, hi+margin
	for _, g := range groups {
		lo, hi = math.Min(lo, lo-g.bias-11*g.u), math.Max(hi, hi-g.bias+10*g.u)
	}
	if !flat {
		lo, hi = math.Min(lo, mean-14*sd), math.Max(hi, mean+14*sd)
	}
	points := 0
	f := own
	for _, g := range groups {
		says, before := g.over(r, lo, hi, mean, sd, flat), f
		f = func(x float64) float64 { return before(x) + says(x) }
		if g.u > 0 {
			points = 301 // which the bias leaves smooth
		}
	}
	lo, hi = closer(f, lo, hi, 161)
	if points == 0 { // a peak on a wide pedestal, and edges of displays, are as narrow as the noise
		points = min(6001, max(401, int((hi-lo)/(0.3*o.sharpest(r, members)))))
	}
	h := (hi - lo) / float64(points-1)
	logs := make([]float64, points)
	for i := range logs {
		logs[i] = f(lo + float64(i)*h)
	}
	return tabulate(lo, h, logs, 8)
}

// sharpest returns the narrowest noise of readings under r.
func (o *dense) sharpest(r float64, members []int) float64 {
	least := math.Inf(1)
	for _, i := range members {
		y := o.says(i)
		least = math.Min(least, y.noise(r))
	}
	return least
}

// group is the readings under one calibration.
type group struct {
	bias, u float64
	count   map[blurred]float64
}

func (o *dense) grouped(members []int) map[int]*group {
	all := map[int]*group{}
	for _, i := range members {
		n, bias, u := o.bias(o.readings[i].Time)
		if all[n] == nil {
			all[n] = &group{bias, u, map[blurred]float64{}}
		}
		all[n].count[o.says(i)]++
	}
	return all
}

// log is ln of what the readings say of eta.
func (g *group) log(eta, r float64) float64 {
	sum := 0.0
	for y, n := range g.count {
		sum += n * y.log(eta, r)
	}
	return sum
}

// over returns ln of what the readings say of the level, which lies between lo and hi, with
// the bias integrated out.
func (g *group) over(r, lo, hi, mean, sd float64, flat bool) func(x float64) float64 {
	if g.u == 0 {
		return func(x float64) float64 { return g.log(x+g.bias, r) }
	}
	joint := func(eta float64) float64 {
		z := (eta - mean - g.bias) / math.Hypot(sd, g.u)
		if flat {
			z = 0
		}
		return g.log(eta, r) - z*z/2
	}
	lo, hi = closer(joint, lo+g.bias-10*g.u, hi+g.bias+10*g.u, 161)
	points := min(20_001, max(401, int((hi-lo)/(0.4*g.u))))
	h := (hi - lo) / float64(points-1)
	weights := make([]float64, points)
	for i := range weights {
		weights[i] = g.log(lo+float64(i)*h, r)
	}
	top := floats.Max(weights)
	for i, v := range weights {
		weights[i] = math.Exp(v-top) * h / g.u / math.Sqrt(2*math.Pi)
	}
	return func(x float64) float64 {
		sum := 0.0
		for i, w := range weights {
			z := (lo + float64(i)*h - x - g.bias) / g.u
			sum += w * math.Exp(-z*z/2)
		}
		return top + math.Log(math.Max(sum, 1e-300))
	}
}

// closer returns the part of an interval where a function isn't far below its highest.
func closer(f func(float64) float64, lo, hi float64, points int) (float64, float64) {
	for _, drop := range [...]float64{150, 150, 85} {
		h := (hi - lo) / float64(points-1)
		logs := make([]float64, points)
		for i := range logs {
			logs[i] = f(lo + float64(i)*h)
		}
		first, last := inner(logs, drop)
		lo, hi = lo+float64(first)*h, lo+float64(last)*h
	}
	return lo, hi
}
