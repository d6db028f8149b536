package engine

import (
	"math"
	"slices"
	"time"

	"leadline.example/engine/posterior"
)

// node is what is held given r.
type node struct {
	v     float64        // see scale.r
	bias  posterior.Bias // of the first calibration: a stratum of it, see strata
	prior float64        // ln of the prior's density in v
	log   float64        // ln of the readings' density given r, up to what all nodes share
	held  holder
}

// holder is a belief given r.
type holder interface {
	add(m *model, e *Row, r float64) heard
	widen(variance float64)
	// after returns the level at an instant without changing the holder.
	after(m *model, at Instant) posterior.Posterior
	// foresee returns the distribution of an indication at an instant.
	foresee(m *model, at Instant, by *Instrument, r float64) posterior.Posterior
	shared(m *model, at Instant, r float64) sharedBelief
	clone() holder
	append(b []byte) []byte
}

// heard is what a reading said, given r.
type heard struct {
	log          float64 // ln of its density or probability, given the readings before
	foretold     bool
	below, above float64 // probabilities that the indication would be beyond its ends
	outlier      float64 // probability that it is an outlier
}

// lone is a joint belief given r.
type lone struct {
	joint *joint
	of    *model // from which given was made
	given *model // with r known
}

func (l *lone) clone() holder { return &lone{l.joint.clone(), l.of, l.given} }

// model returns m with r known. It belongs to the fold: a View's is only read.
func (l *lone) model(m *model, r float64) *model {
	if l.of != m {
		l.of, l.given = m, m.given(r)
	}
	return l.given
}

func (l *lone) add(m *model, e *Row, r float64) heard {
	s := l.joint.add(l.model(m, r), e, m.indication(e).Lower)
	z, ok := s.Score()
	if !ok {
		return heard{}
	}
	standard := posterior.Normal(posterior.Level{}, 1)
	return heard{log: s.LogDensity(), foretold: true, below: standard.LowerTail(z), above: standard.UpperTail(z)}
}

func (l *lone) widen(variance float64) { l.joint.filter.WidenLevel(variance) }

func (l *lone) after(m *model, at Instant) posterior.Posterior {
	if at <= l.joint.at || !l.joint.renewsBy(m, at) {
		return l.joint.filter.PosteriorAfter(lasting(l.joint.at, at))
	}
	j := l.joint.clone()
	j.move(m, at)
	return j.level()
}

func (l *lone) foresee(m *model, at Instant, by *Instrument, r float64) posterior.Posterior {
	j := l.joint.clone()
	given := m.given(r)
	j.move(given, at)
	if by != nil {
		if i := given.instrument(by.Number); i != nil {
			by = i
		} else if by.Declaration.Repeatability.Learned.Learned() {
			return posterior.Posterior{} // nothing is known of its r here
		}
	}
	return j.predictive(given, by)
}

func (l *lone) append(b []byte) []byte { return l.joint.append(b) }

// sharedBelief is what is believed beside the level.
type sharedBelief struct {
	biases         []BiasBelief
	references     []ReferenceBelief
	hasSlope       bool
	slope, slopeSD float64
	slopePer       time.Duration
}

// shared returns what the nodes together believe beside the level: means and, by the law
// of total variance, standard deviations.
func (b *bank) shared(m *model, at Instant) sharedBelief {
	if b == nil || len(b.nodes) == 0 {
		return sharedBelief{}
	}
	var sum sharedBelief
	s := m.scale()
	moments := map[*float64]*float64{} // means to standard deviations
	for i, w := range b.weights() {
		one := b.nodes[i].held.shared(m, at, s.r(b.nodes[i].v))
		if i == 0 {
			sum = sharedBelief{slices.Clone(one.biases), slices.Clone(one.references), one.hasSlope, 0, 0, one.slopePer}
			for k := range sum.biases {
				sum.biases[k].Mean, sum.biases[k].StandardDeviation = 0, 0
				moments[&sum.biases[k].Mean] = &sum.biases[k].StandardDeviation
			}
			for k := range sum.references {
				sum.references[k].Mean, sum.references[k].StandardDeviation = 0, 0
				moments[&sum.references[k].Mean] = &sum.references[k].StandardDeviation
			}
			moments[&sum.slope] = &sum.slopeSD
		}
		join := func(mean, square *float64, x, sd float64) { *mean, *square = *mean+w*x, *square+w*(x*x+sd*sd) }
		for k, x := range one.biases {
			join(&sum.biases[k].Mean, &sum.biases[k].StandardDeviation, x.Mean, x.StandardDeviation)
		}
		for k, x := range one.references {
			join(&sum.references[k].Mean, &sum.references[k].StandardDeviation, x.Mean, x.StandardDeviation)
		}
		join(&sum.slope, &sum.slopeSD, one.slope, one.slopeSD)
	}
	for mean, square := range moments {
		*square = math.Sqrt(max(0, *square-*mean**mean))
	}
	return sum
}

func (l *lone) shared(m *model, at Instant, r float64) (s sharedBelief) {
	given := m.given(r)
	j := l.joint.clone()
	j.move(given, at)
	s.biases, s.references = j.biases(given), j.commons()
	s.hasSlope, s.slope, s.slopeSD, s.slopePer = j.slope(given)
	return s
}
