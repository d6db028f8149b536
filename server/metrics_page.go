package server

import (
	"compress/gzip"
	"io"
	"strconv"
	"strings"

	"leadline.example/engine"
	"leadline.example/engine/decide"
)

// metric numbers the metrics of a quantity in the order of the page.
type metric int

const (
	infoMetric metric = iota
	meanMetric
	deviationMetric
	lowerMetric
	upperMetric
	breachMetric
	limitMetric
	verdictMetric
	readingsMetric
	lastMetric
	horizonMetric
	medianMetric
	checkMetric
	coverageMetric
	squareMetric
	stepsMetric
	outlyingMetric
	metricCount
)

// header is what the page says of a metric before its lines.
type header struct{ name, kind, help string }

// quantityMetrics heads the metrics of a quantity. With every one present a
// quantity has 21 series, and 23 if it declares a breach horizon.
func quantityMetrics() [metricCount]header {
	const gauge, counter = "gauge", "counter"
	return [metricCount]header{
		infoMetric:      {"leadline_quantity_info", gauge, "Constant 1 for each quantity, with its unit and description."},
		meanMetric:      {"leadline_posterior_mean", gauge, "Mean of the belief about the true value, in the quantity's unit."},
		deviationMetric: {"leadline_posterior_standard_deviation", gauge, "Standard deviation of the belief (its standard uncertainty), in the quantity's unit."},
		lowerMetric:     {"leadline_posterior_interval_lower", gauge, "Lower end of the coverage interval of the true value, in the quantity's unit."},
		upperMetric:     {"leadline_posterior_interval_upper", gauge, "Upper end of the coverage interval of the true value, in the quantity's unit."},
		breachMetric:    {"leadline_breach_probability", gauge, "Probability that the true value lies outside its tolerance."},
		limitMetric:     {"leadline_tolerance_limit", gauge, "Limit of permissible true values, in the quantity's unit."},
		verdictMetric:   {"leadline_verdict", gauge, "1 for the verdict in force under the quantity's decision rule, 0 for the others."},
		readingsMetric:  {"leadline_quantity_readings_total", counter, "Readings applied to the quantity."},
		lastMetric:      {"leadline_last_reading_timestamp_seconds", gauge, "Time of the newest reading applied to the quantity, in seconds since 1970."},
		horizonMetric:   {"leadline_breach_within_horizon_probability", gauge, "Probability that a limit of the tolerance is crossed within the declared breach horizon, as last found out, up to a minute ago or longer where many are to be."},
		medianMetric:    {"leadline_median_time_to_breach_seconds", gauge, "Time by which a limit is crossed with probability one half; absent where that is beyond the breach horizon. Found out together with leadline_breach_within_horizon_probability."},
		checkMetric:     {"leadline_model_check", gauge, "1 for what the readings now say of the declaration; there is a series for that result alone."},
		coverageMetric:  {"leadline_predictive_coverage", gauge, "Share of the scored readings within the central predictive interval of the coverage probability, which is expected."},
		squareMetric:    {"leadline_normal_score_mean_square", gauge, "Mean squared normal score of the readings in what was predicted; 1 is expected."},
		stepsMetric:     {"leadline_steps_total", counter, "Steps found in the readings of the quantity. It begins anew where late readings have it found out again."},
		outlyingMetric:  {"leadline_outlying_readings_total", counter, "Readings so far out that their predicted tail probability was below 0.0001, applied all the same. It begins anew where late readings have it found out again."},
	}
}

// quantityLabels is what one revision of a quantity makes of its lines.
type quantityLabels struct {
	quantity string // `{quantity="..."`, without the closing brace
	unit     string // `{quantity="...",unit="..."`
	info     string // a whole line but for the metric's name
	limits   []string
}

func labelsOf(q *engine.Quantity) *quantityLabels {
	d := &q.Declaration
	quantity := `{quantity="` + escapeLabel(string(q.ID)) + `"`
	unit := quantity + `,unit="` + escapeLabel(d.Unit) + `"`
	l := &quantityLabels{
		quantity: quantity,
		unit:     unit,
		info:     unit + `,description="` + escapeLabel(d.Description) + "\"} 1\n",
	}
	if d.Tolerance.HasLower {
		l.limits = append(l.limits, limitLine(unit, "lower", d.Tolerance.Lower))
	}
	if d.Tolerance.HasUpper {
		l.limits = append(l.limits, limitLine(unit, "upper", d.Tolerance.Upper))
	}
	return l
}

func limitLine(unit, side string, limit float64) string {
	return string(append(appendValue([]byte(unit+`,side="`+side+`"} `), limit), '\n'))
}

// escapeLabel writes a label value of the text format 0.0.4: backslash, quote
// and line feed escaped, UTF-8 only.
func escapeLabel(s string) string {
	return strings.NewReplacer(`\`, `\\`, `"`, `\"`, "\n", `\n`).Replace(strings.ToValidUTF8(s, "\uFFFD"))
}

// An exposition is a page being made. The format wants all lines of a metric
// together, while all numbers of a quantity come together: hence parts with a
// buffer for each metric, and one pass over the quantities. The buffers are
// used again, so that a page of megabytes costs no garbage.
type exposition struct {
	heads [metricCount][]byte // what stands before the lines of a metric
	parts []*part             // each of some quantities, in the order of their IDs
	rest  []byte              // what follows the quantities
	zip   *gzip.Writer        // made when first asked for
}

// part is the lines of some quantities. Different parts can be written at the
// same time.
type part struct {
	names    [metricCount]string
	verdicts [len(decide.Verdicts) + 1][]string // ends of the lines, by the verdict in force; none for 0
	lines    [metricCount][]byte
}

func newExposition(parts int) *exposition {
	x := &exposition{}
	verdicts := verdictEnds()
	for range parts {
		x.parts = append(x.parts, &part{verdicts: verdicts})
	}
	for i, h := range quantityMetrics() {
		x.heads[i] = appendHeader(nil, h)
		for _, p := range x.parts {
			p.names[i] = h.name
		}
	}
	return x
}

func verdictEnds() (ends [len(decide.Verdicts) + 1][]string) {
	for _, inForce := range decide.Verdicts {
		for _, v := range decide.Verdicts {
			value := "0\n"
			if v == inForce {
				value = "1\n"
			}
			ends[inForce] = append(ends[inForce], `,verdict="`+v.String()+`"} `+value)
		}
	}
	return ends
}

// reset begins a page.
func (x *exposition) reset() {
	for _, p := range x.parts {
		for i := range p.lines {
			p.lines[i] = p.lines[i][:0]
		}
	}
	x.rest = x.rest[:0]
}

func appendHeader(b []byte, h header) []byte {
	for _, s := range [...]string{"# HELP ", h.name, " ", h.help, "\n# TYPE ", h.name, " ", h.kind, "\n"} {
		b = append(b, s...)
	}
	return b
}

// The ends of label sets, up to the value.
const (
	endLabels     = `} `
	coverageLabel = `,coverage_probability="0.95"} ` // engine.DefaultCoverage
	halfLabel     = `,coverage_probability="0.5"} `
	sideBelow     = `,side="below"} `
	sideAbove     = `,side="above"} `
	sideEither    = `,side="either"} `
)

// quantity writes the lines of a quantity; what doesn't exist has none.
func (p *part) quantity(l *quantityLabels, n *numberTexts) {
	f := &n.figures
	p.text(infoMetric, l.info, "")
	if f.HasMean {
		p.number(meanMetric, l.unit, endLabels, n.text(meanNumber))
	}
	if f.HasStandardDeviation {
		p.number(deviationMetric, l.unit, endLabels, n.text(deviationNumber))
	}
	if f.HasInterval {
		p.number(lowerMetric, l.unit, coverageLabel, n.text(lowerNumber))
		p.number(upperMetric, l.unit, coverageLabel, n.text(upperNumber))
	}
	if f.HasBreach {
		p.number(breachMetric, l.quantity, sideBelow, n.text(belowNumber))
		p.number(breachMetric, l.quantity, sideAbove, n.text(aboveNumber))
		p.number(breachMetric, l.quantity, sideEither, n.text(eitherNumber))
	}
	for _, line := range l.limits {
		p.text(limitMetric, line, "")
	}
	for _, end := range p.verdicts[f.Verdict] {
		p.text(verdictMetric, l.quantity, end)
	}
	p.count(readingsMetric, l.quantity, f.ReadingCount)
	if f.HasLast {
		p.text(lastMetric, l.quantity, endLabels)
		p.lines[lastMetric] = append(appendSeconds(p.lines[lastMetric], f.LastTime), '\n')
	}
	if f.HasHorizon {
		p.number(horizonMetric, l.quantity, endLabels, n.text(horizonNumber))
	}
	if f.HasHorizon && f.HasMedian {
		p.number(medianMetric, l.quantity, endLabels, n.text(medianNumber))
	}
	if f.Check.Result != "" {
		p.check(l, n)
	}
}

// check writes the lines of how a quantity's readings agree with its declaration.
func (p *part) check(l *quantityLabels, n *numberTexts) {
	c := &n.figures.Check
	p.text(checkMetric, l.quantity, `,result="`)
	p.lines[checkMetric] = append(append(p.lines[checkMetric], c.Result...), "\"} 1\n"...)
	if c.HasCoverage {
		p.number(coverageMetric, l.quantity, halfLabel, n.text(halfNumber))
		p.number(coverageMetric, l.quantity, coverageLabel, n.text(mostNumber))
		p.number(squareMetric, l.quantity, endLabels, n.text(squareNumber))
	}
	p.count(stepsMetric, l.quantity, c.Steps)
	p.count(outlyingMetric, l.quantity, c.Outlying)
}

// count writes a series whose value is a whole number.
func (p *part) count(m metric, labels string, value int) {
	p.text(m, labels, endLabels)
	p.lines[m] = append(strconv.AppendInt(p.lines[m], int64(value), 10), '\n')
}

// number writes one series.
func (p *part) number(m metric, labels, end string, value []byte) {
	b := append(p.lines[m], p.names[m]...)
	b = append(b, labels...)
	b = append(b, end...)
	b = append(b, value...)
	p.lines[m] = append(b, '\n')
}

// text writes a metric's name and what follows it.
func (p *part) text(m metric, labels, end string) {
	b := append(p.lines[m], p.names[m]...)
	b = append(b, labels...)
	p.lines[m] = append(b, end...)
}

// scalar writes a metric of one series without labels, after the quantities.
func (x *exposition) scalar(name, help string, v float64) {
	x.rest = append(appendHeader(x.rest, header{name, "gauge", help}), name...)
	x.rest = append(appendValue(append(x.rest, ' '), v), '\n')
}

// timestamp writes a metric of one series without labels: a moment.
func (x *exposition) timestamp(name, help string, at engine.Instant) {
	x.rest = append(appendHeader(x.rest, header{name, "gauge", help}), name...)
	x.rest = append(appendSeconds(append(x.rest, ' '), at), '\n')
}

// Write appends to what follows the quantities.
func (x *exposition) Write(p []byte) (int, error) {
	x.rest = append(x.rest, p...)
	return len(p), nil
}

// send writes the page.
func (x *exposition) send(out io.Writer) error {
	for m, head := range x.heads {
		if _, err := out.Write(head); err != nil {
			return err
		}
		for _, p := range x.parts {
			if _, err := out.Write(p.lines[m]); err != nil {
				return err
			}
		}
	}
	_, err := out.Write(x.rest)
	return err
}

// sendZipped writes the page compressed: at the fastest level, as clients are
// near and a scrape should be short.
func (x *exposition) sendZipped(out io.Writer) error {
	if x.zip == nil {
		var err error
		if x.zip, err = gzip.NewWriterLevel(out, gzip.BestSpeed); err != nil {
			return err
		}
	}
	x.zip.Reset(out)
	defer x.zip.Reset(nil) // lets go of the client
	if err := x.send(x.zip); err != nil {
		return err
	}
	return x.zip.Close()
}
