package posterior_test

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// life runs a filter and the oracle through one and the same random history.
type life struct {
	random *rand.Rand
	scale  float64
	spread float64 // of the logarithms of the standard deviations
	now    *big.Float
	filter posterior.Filter
	told   history
	met    map[int]int // life of each further state of the filter
	states []int
}

// width draws a standard deviation; they differ by a few orders of magnitude, in
// every fourth case by up to ten.
func (l *life) width() float64 { return l.scale * math.Exp(l.spread*l.random.NormFloat64()) }

func (l *life) prior() posterior.Prior {
	if l.random.IntN(3) == 0 {
		return posterior.Prior{Vague: true}
	}
	return posterior.Prior{Mean: l.centre(), SD: l.width()}
}

func (l *life) centre() float64 { return l.scale * (1e3 + 3*l.random.NormFloat64()) }

func (l *life) slope() posterior.SlopePrior {
	return posterior.SlopePrior{Mean: l.scale * l.random.NormFloat64() / 10, SD: l.width() / 10}
}

func (l *life) process() posterior.Process {
	s := l.width()
	p := posterior.Process{Variance: s * s}
	switch l.random.IntN(3) {
	case 0:
		p.Rate = math.Exp(2*l.random.NormFloat64()) / 5
	case 1:
		p.Diffusion = p.Variance * l.random.Float64()
	}
	return p
}

func newLife(form posterior.MotionForm, random *rand.Rand) *life {
	l := &life{random: random, spread: []float64{2, 2, 2, 4}[random.IntN(4)], scale: math.Exp(5 * random.NormFloat64()), now: none(), met: map[int]int{}}
	m := posterior.Motion{Form: form}
	walk, wander, width := l.width(), l.width(), l.width()
	switch form {
	case posterior.MotionWalk:
		m.Walk = walk * walk / 10
	case posterior.MotionTrend:
		m.Walk = walk * walk / 10 * float64(random.IntN(2))
		m.Wander = wander * wander / 1e3 * float64(random.IntN(2))
	case posterior.MotionReverting:
		m.Mean, m.Variance, m.Rate = l.centre(), width*width, math.Exp(random.NormFloat64())/10
	}
	prior, slope := l.prior(), l.slope()
	l.filter = posterior.NewFilter(m, prior, slope)
	l.told = history{motion: m, levels: []levelLife{{none(), prior, slope}}}
	return l
}

// enter gives a state of the filter another life.
func (l *life) enter(state int, p posterior.Process) {
	l.met[state] = len(l.told.states)
	l.told.states = append(l.told.states, stateLife{l.now, p})
}

// terms draws what a reading rests on besides the level.
func (l *life) terms() (all []posterior.Term, byLife map[int]float64) {
	byLife = map[int]float64{}
	for _, s := range l.states {
		if l.random.IntN(3) > 0 {
			c := math.Exp(l.random.NormFloat64())
			all, byLife[l.met[s]] = append(all, posterior.Term{State: s, Coefficient: c}), c
		}
	}
	return all, byLife
}

func (l *life) step() {
	switch n := l.random.IntN(16); {
	case n < 2 && len(l.states) < 6:
		p := l.process()
		s := l.filter.Add(p)
		l.states = append(l.states, s)
		l.enter(s, p)
	case n == 2 && len(l.states) > 0:
		s, p := l.states[l.random.IntN(len(l.states))], l.process()
		l.filter.Redraw(s, p)
		l.enter(s, p)
	case n == 3 && l.random.IntN(2) == 0:
		prior, slope := l.prior(), l.slope()
		l.filter.Renew(prior, slope)
		l.told.levels = append(l.told.levels, levelLife{l.now, prior, slope})
	case n < 9:
		h := math.Exp(2 * l.random.NormFloat64())
		l.filter.Advance(h)
		l.now = add(l.now, num(h))
	default:
		l.read()
	}
}

func (l *life) read() {
	terms, byLife := l.terms()
	s := l.width()
	r := sight{
		at: l.now, life: len(l.told.levels) - 1, states: byLife, variance: s * s,
		level: 1 + 0.01*l.random.NormFloat64(), offset: l.scale * l.random.NormFloat64(), y: l.centre(),
	}
	l.filter.Update(r.y, r.offset, r.level, terms, r.variance)
	l.told.seen = append(l.told.seen, r)
}

// What the filter believes is what conditioning the whole history at once gives:
// the level, and combinations of level and states, in which errors cancel.
func TestFilterAgainstConditioningOfTheWholeHistory(t *testing.T) {
	random := source(t)
	for form, name := range []string{"constant", "walk", "trend", "reverting"} {
		worstMean, worstSD, compared := 0.0, 0.0, 0
		for n := range 200 {
			l := newLife(posterior.MotionForm(form), random)
			for range 10 + random.IntN(30) {
				l.step()
			}
			unread := true
			for i := range l.told.seen {
				unread = unread && l.told.seen[i].life != len(l.told.levels)-1
			}
			if vague := unread && l.told.levels[len(l.told.levels)-1].prior.Vague; vague != l.filter.Vague() {
				t.Fatalf("%s %d: vague is %v, want %v", name, n, l.filter.Vague(), vague)
			} else if vague {
				continue
			}
			compared++
			for range 3 {
				terms, byLife := l.terms()
				if random.IntN(2) == 0 {
					terms, byLife = nil, nil
				}
				s := sight{at: l.now, life: len(l.told.levels) - 1, level: 1, states: byLife}
				mean, variance := l.told.ask(&s)
				gotMean, gotVariance := l.filter.Combination(append([]posterior.Term{{State: 0, Coefficient: 1}}, terms...))
				v, _ := variance.Float64()
				sd := math.Sqrt(v)
				m := off(gotMean, mean, sd) - 2*math.Abs(gotMean)*0x1p-52/sd
				u := off(math.Sqrt(gotVariance), none().Sqrt(variance), sd)
				worstMean, worstSD = max(worstMean, m), max(worstSD, u)
				if !(m <= 1e-9) || !(u <= 1e-9) {
					t.Errorf("%s %d: mean %v off by %v sd, sd %v by %v", name, n, gotMean, m, math.Sqrt(gotVariance), u)
				}
			}
		}
		t.Logf("%s: %d compared; mean off by %.1e sd at most, sd by %.1e", name, compared, worstMean, worstSD)
		if compared < 150 {
			t.Errorf("%s: only %d compared", name, compared)
		}
	}
}

// A belief far off and wide, then readings that tell 1e10 times more: the
// rounding of a gain near 1 is 3e-7 standard deviations here, and mustn't stay in
// the mean.
func TestSharpReadingOfAWideBelief(t *testing.T) {
	const far, narrow, bias = 1e10, 1.0, 0.5
	told := history{levels: []levelLife{{none(), posterior.Prior{Mean: -far, SD: far}, posterior.SlopePrior{}}}}
	told.states = []stateLife{{none(), posterior.Process{Variance: bias * bias}}}
	f := posterior.NewFilter(posterior.Motion{}, told.levels[0].prior, posterior.SlopePrior{})
	state := f.Add(told.states[0].process)
	for _, y := range []float64{0.1, -0.7, 0.3} {
		f.Update(y, 0, 1, []posterior.Term{{State: state, Coefficient: 1}}, narrow*narrow)
		told.seen = append(told.seen, sight{at: none(), level: 1, states: map[int]float64{0: 1}, variance: narrow * narrow, y: y})
		asked := sight{at: none(), level: 1}
		mean, variance := told.ask(&asked)
		sd, _ := none().Sqrt(variance).Float64()
		if d := off(f.Mean(0), mean, sd); !(d <= 1e-12) {
			t.Errorf("after %v: mean %v off by %v sd", y, f.Mean(0), d)
		}
	}
}
