package server

import (
	"math"
	"strconv"

	"google.golang.org/protobuf/types/known/durationpb"
	"google.golang.org/protobuf/types/known/timestamppb"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// jsonObject writes a JSON object as marshalJSON would write the message: every
// single post answers with a belief, for which reflection takes as long as all
// the rest of the handler.
type jsonObject struct {
	b     []byte
	comma bool
}

func beginObject(b []byte) jsonObject { return jsonObject{b: append(b, '{')} }

func (o *jsonObject) end() []byte { return append(o.b, '}') }

func (o *jsonObject) key(name string) {
	if o.comma {
		o.b = append(o.b, ',')
	}
	o.comma = true
	o.b = append(append(append(o.b, '"'), name...), `":`...)
}

func (o *jsonObject) text(name, value string) {
	o.key(name)
	o.b = appendText(o.b, value)
}

func (o *jsonObject) number(name string, value float64) {
	o.key(name)
	o.b = appendNumber(o.b, value)
}

// optional writes a number that may be absent.
func (o *jsonObject) optional(name string, value *float64) {
	if value != nil {
		o.number(name, *value)
	}
}

func (o *jsonObject) integer(name string, value uint32) {
	o.key(name)
	o.b = strconv.AppendUint(o.b, uint64(value), 10)
}

// optionalInteger writes a whole number that may be absent.
func (o *jsonObject) optionalInteger(name string, value *uint32) {
	if value != nil {
		o.integer(name, *value)
	}
}

func (o *jsonObject) boolean(name string, value bool) {
	o.key(name)
	o.b = strconv.AppendBool(o.b, value)
}

// duration writes a duration that may be absent; none of a belief is below 0.
func (o *jsonObject) duration(name string, value *durationpb.Duration) {
	if value != nil {
		o.key(name)
		o.b = append(appendDuration(append(o.b, '"'), value), `s"`...)
	}
}

// time writes a time that may be absent.
func (o *jsonObject) time(name string, value *timestamppb.Timestamp) {
	if value != nil {
		o.key(name)
		o.b = append(appendTime(append(o.b, '"'), value.AsTime()), '"')
	}
}

// object writes an object by what fn writes into it.
func (o *jsonObject) object(name string, fn func(*jsonObject)) {
	o.key(name)
	inner := beginObject(o.b)
	fn(&inner)
	o.b = inner.end()
}

// appendBelief writes a belief.
func appendBelief(b []byte, m *leadlinev1.Belief) []byte {
	o := beginObject(b)
	o.text("quantity", m.GetQuantity())
	o.text("unit", m.GetUnit())
	o.time("time", m.GetTime())
	o.optional("mean", m.Mean)
	o.optional("standard_deviation", m.StandardDeviation)
	o.interval(m.GetInterval())
	if x := m.GetBreach(); x != nil {
		o.object("breach", func(o *jsonObject) { o.sides(x.GetBelow(), x.GetAbove(), x.GetEither()) })
	}
	o.optional("conformance_probability", m.ConformanceProbability)
	if x := m.GetThreshold(); x != nil {
		o.object("threshold", func(o *jsonObject) {
			o.number("value", x.GetValue())
			o.number("probability_below", x.GetProbabilityBelow())
		})
	}
	if x := m.GetPredictive(); x != nil {
		o.object("predictive", func(o *jsonObject) { o.predictive(x) })
	}
	if x := m.GetDistribution(); x != nil {
		o.object("distribution", func(o *jsonObject) { o.distribution(x) })
	}
	if x := m.GetRepeatability(); x != nil {
		o.object("repeatability", func(o *jsonObject) { o.repeatability(x) })
	}
	o.instruments(m)
	o.time("renewal_time", m.GetRenewalTime())
	o.model(m)
	o.integer("reading_count", m.GetReadingCount())
	o.time("last_reading_time", m.GetLastReadingTime())
	if m.Verdict != nil {
		o.text("verdict", m.GetVerdict().String())
	}
	o.integer("revision", m.GetRevision())
	o.text("ledger_position", strconv.FormatUint(m.GetLedgerPosition(), 10))
	o.boolean("rebuilding", m.GetRebuilding())
	o.texts("undetermined", m.GetUndetermined())
	return o.end()
}

// instruments writes what a belief says of the slope and of the instruments.
func (o *jsonObject) instruments(m *leadlinev1.Belief) {
	if x := m.GetSlope(); x != nil {
		o.object("slope", func(o *jsonObject) {
			o.optional("mean", x.Mean)
			o.optional("standard_deviation", x.StandardDeviation)
			o.duration("per", x.GetPer())
		})
	}
	list(o, "biases", m.GetBiases(), func(o *jsonObject, x *leadlinev1.BiasBelief) {
		o.text("instrument", x.GetInstrument())
		o.time("valid_from", x.GetValidFrom())
		o.number("mean", x.GetMean())
		o.number("standard_deviation", x.GetStandardDeviation())
		o.text("reference", x.GetReference())
	})
	list(o, "references", m.GetReferences(), func(o *jsonObject, x *leadlinev1.ReferenceBelief) {
		o.text("reference", x.GetReference())
		o.number("mean", x.GetMean())
		o.number("standard_deviation", x.GetStandardDeviation())
	})
	o.boolean("linearised", m.GetLinearised())
	o.boolean("resolution_as_variance", m.GetResolutionAsVariance())
	if x := m.GetFlagged(); x != nil {
		o.object("flagged", func(o *jsonObject) {
			o.integer("overdue", x.GetOverdue())
			o.integer("not_yet_valid", x.GetNotYetValid())
			o.integer("uncalibrated", x.GetUncalibrated())
		})
	}
}

// list writes an array of objects, each by what fn writes into it.
func list[M any](o *jsonObject, name string, values []M, fn func(*jsonObject, M)) {
	o.key(name)
	o.b = append(o.b, '[')
	for i, value := range values {
		if i > 0 {
			o.b = append(o.b, ',')
		}
		inner := beginObject(o.b)
		fn(&inner, value)
		o.b = inner.end()
	}
	o.b = append(o.b, ']')
}

func (o *jsonObject) texts(name string, values []string) {
	o.key(name)
	o.b = append(o.b, '[')
	for i, value := range values {
		if i > 0 {
			o.b = append(o.b, ',')
		}
		o.b = appendText(o.b, value)
	}
	o.b = append(o.b, ']')
}

func (o *jsonObject) interval(x *leadlinev1.Interval) {
	if x == nil {
		return
	}
	o.object("interval", func(o *jsonObject) {
		o.number("lower", x.GetLower())
		o.number("upper", x.GetUpper())
		o.number("coverage_probability", x.GetCoverageProbability())
	})
}

func (o *jsonObject) sides(below, above, either float64) {
	o.number("below", below)
	o.number("above", above)
	o.number("either", either)
}

func (o *jsonObject) predictive(x *leadlinev1.Predictive) {
	o.optional("mean", x.Mean)
	o.optional("standard_deviation", x.StandardDeviation)
	o.interval(x.GetInterval())
	if y := x.GetOutside(); y != nil {
		o.object("outside", func(o *jsonObject) { o.sides(y.GetBelow(), y.GetAbove(), y.GetEither()) })
	}
	o.text("instrument", x.GetInstrument())
}

func (o *jsonObject) distribution(x *leadlinev1.Distribution) {
	o.text("form", x.GetForm().String())
	o.optional("location", x.Location)
	o.optional("scale", x.Scale)
	o.optional("degrees_of_freedom", x.DegreesOfFreedom)
}

func (o *jsonObject) repeatability(x *leadlinev1.RepeatabilityBelief) {
	o.optional("standard_deviation", x.StandardDeviation)
	o.optional("median", x.Median)
	o.interval(x.GetInterval())
	o.optional("estimate", x.Estimate)
}

// appendNumber writes a finite number in full precision, as ECMAScript does;
// no belief holds another.
func appendNumber(b []byte, x float64) []byte {
	if a := math.Abs(x); a == 0 || a >= 1e-6 && a < 1e21 {
		return strconv.AppendFloat(b, x, 'f', -1, 64)
	}
	b = strconv.AppendFloat(b, x, 'e', -1, 64)
	if n := len(b); n >= 4 && b[n-4] == 'e' && b[n-3] == '-' && b[n-2] == '0' {
		b[n-2] = b[n-1] // e-09 is e-9
		b = b[:n-1]
	}
	return b
}
