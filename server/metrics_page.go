package server

import (
	"compress/gzip"
	"io"
	"math"
	"strconv"
	"strings"

	"leadline.example/engine"
	"leadline.example/engine/decide"
)

// published is what the page says of one quantity at the instant of a scrape.
// A copy is taken under Metrics.evaluating; then it is only read.
type published struct {
	labels    *quantityLabels
	tolerance engine.Tolerance
	engine.Figures
}

// quantityLabels are the labels of one revision of a quantity, escaped once.
type quantityLabels struct {
	quantity string // `{quantity="..."`, without the closing brace
	unit     string // `{quantity="...",unit="..."`
	info     string // `{quantity="...",unit="...",description="..."`
}

func labelsOf(q *engine.Quantity) *quantityLabels {
	quantity := `{quantity="` + escapeLabel(string(q.ID)) + `"`
	unit := quantity + `,unit="` + escapeLabel(q.Declaration.Unit) + `"`
	return &quantityLabels{
		quantity: quantity,
		unit:     unit,
		info:     unit + `,description="` + escapeLabel(q.Declaration.Description) + `"`,
	}
}

// escapeLabel writes a label value of the text format 0.0.4: backslash, quote
// and line feed escaped, UTF-8 only.
func escapeLabel(s string) string {
	return strings.NewReplacer(`\`, `\\`, `"`, `\"`, "\n", `\n`).Replace(strings.ToValidUTF8(s, "\uFFFD"))
}

// A family is one metric of the page: its lines must stand together.
type family struct {
	name, kind, help string
	lines            func(*pageWriter, *published)
}

// The tails of label sets; a line ends at its value.
const (
	endLabels     = `} `
	coverageLabel = `,coverage_probability="0.95"} `
	sideBelow     = `,side="below"} `
	sideAbove     = `,side="above"} `
	sideEither    = `,side="either"} `
	limitLower    = `,side="lower"} `
	limitUpper    = `,side="upper"} `
)

// families lists the metrics of a quantity in the order of the page. With
// every one present a quantity has 15 series.
func families() []family {
	const gauge, counter = "gauge", "counter"
	return []family{
		{"leadline_quantity_info", gauge, "Constant 1 for each quantity, with its unit and description.", infoLines},
		{"leadline_posterior_mean", gauge, "Mean of the belief about the true value, in the quantity's unit.", meanLines},
		{"leadline_posterior_standard_deviation", gauge, "Standard deviation of the belief (its standard uncertainty), in the quantity's unit.", deviationLines},
		{"leadline_posterior_interval_lower", gauge, "Lower end of the coverage interval of the true value, in the quantity's unit.", lowerLines},
		{"leadline_posterior_interval_upper", gauge, "Upper end of the coverage interval of the true value, in the quantity's unit.", upperLines},
		{"leadline_breach_probability", gauge, "Probability that the true value lies outside its tolerance.", breachLines},
		{"leadline_tolerance_limit", gauge, "Limit of permissible true values, in the quantity's unit.", toleranceLines},
		{"leadline_verdict", gauge, "1 for the verdict in force under the quantity's decision rule, 0 for the others.", verdictLines},
		{"leadline_quantity_readings_total", counter, "Readings applied to the quantity.", readingsLines},
		{"leadline_last_reading_timestamp_seconds", gauge, "Time of the newest reading applied to the quantity, in seconds since 1970.", lastLines},
	}
}

func infoLines(w *pageWriter, p *published) { w.line(p.labels.info, endLabels, 1) }

func meanLines(w *pageWriter, p *published) {
	if p.HasMean {
		w.line(p.labels.unit, endLabels, p.Mean)
	}
}

func deviationLines(w *pageWriter, p *published) {
	if p.HasStandardDeviation {
		w.line(p.labels.unit, endLabels, p.StandardDeviation)
	}
}

func lowerLines(w *pageWriter, p *published) {
	if p.HasInterval {
		w.line(p.labels.unit, coverageLabel, p.Lower)
	}
}

func upperLines(w *pageWriter, p *published) {
	if p.HasInterval {
		w.line(p.labels.unit, coverageLabel, p.Upper)
	}
}

func breachLines(w *pageWriter, p *published) {
	if p.HasBreach {
		w.line(p.labels.quantity, sideBelow, p.Breach.Below)
		w.line(p.labels.quantity, sideAbove, p.Breach.Above)
		w.line(p.labels.quantity, sideEither, p.Breach.Either)
	}
}

func toleranceLines(w *pageWriter, p *published) {
	if p.tolerance.HasLower {
		w.line(p.labels.unit, limitLower, p.tolerance.Lower)
	}
	if p.tolerance.HasUpper {
		w.line(p.labels.unit, limitUpper, p.tolerance.Upper)
	}
}

func verdictLines(w *pageWriter, p *published) {
	if p.Verdict == 0 {
		return
	}
	for _, v := range decide.Verdicts {
		value := 0.0
		if v == p.Verdict {
			value = 1
		}
		w.line(p.labels.quantity, w.verdicts[v], value)
	}
}

func readingsLines(w *pageWriter, p *published) {
	w.line(p.labels.quantity, endLabels, float64(p.ReadingCount))
}

func lastLines(w *pageWriter, p *published) {
	if p.HasLast {
		w.start(p.labels.quantity, endLabels)
		w.buffer = append(appendSeconds(w.buffer, p.LastTime), '\n')
	}
}

// A pageWriter formats a page piece by piece into a buffer that is used again,
// so that a page of megabytes costs no garbage. The first error of the client's
// connection is kept and ends the work.
type pageWriter struct {
	out      io.Writer
	zip      *gzip.Writer // made when first asked for
	buffer   []byte
	name     string // of the metric being written
	verdicts [len(decide.Verdicts) + 1]string
	err      error
}

// pieceBytes is the size of one write; larger ones gain nothing (measured).
const pieceBytes = 64 << 10

func newPageWriter() *pageWriter {
	w := &pageWriter{buffer: make([]byte, 0, pieceBytes+4096)}
	for _, v := range decide.Verdicts {
		w.verdicts[v] = `,verdict="` + v.String() + `"} `
	}
	return w
}

// begin points the writer at a client.
func (w *pageWriter) begin(out io.Writer, zipped bool) error {
	w.buffer, w.err, w.out = w.buffer[:0], nil, out
	if !zipped {
		return nil
	}
	if w.zip == nil {
		var err error
		if w.zip, err = gzip.NewWriterLevel(out, gzip.BestSpeed); err != nil {
			return err
		}
	}
	w.zip.Reset(out)
	w.out = w.zip
	return nil
}

// end writes what is left and lets go of the client.
func (w *pageWriter) end() error {
	w.flush()
	if w.out == w.zip && w.err == nil {
		w.err = w.zip.Close()
	}
	w.out = nil
	return w.err
}

// Write takes a piece of page that is formatted already.
func (w *pageWriter) Write(p []byte) (int, error) {
	w.flush()
	if w.err == nil {
		_, w.err = w.out.Write(p)
	}
	return len(p), w.err
}

func (w *pageWriter) flush() {
	if w.err == nil && len(w.buffer) > 0 {
		_, w.err = w.out.Write(w.buffer)
	}
	w.buffer = w.buffer[:0]
}

// quantities writes every family of the given quantities.
func (w *pageWriter) quantities(families []family, quantities []published) {
	for _, f := range families {
		w.family(f.name, f.kind, f.help)
		for i := range quantities {
			if f.lines(w, &quantities[i]); len(w.buffer) >= pieceBytes {
				w.flush()
			}
			if w.err != nil {
				return
			}
		}
	}
}

// family opens the metric to which the following lines belong.
func (w *pageWriter) family(name, kind, help string) {
	w.name = name
	for _, s := range [...]string{"# HELP ", name, " ", help, "\n# TYPE ", name, " ", kind, "\n"} {
		w.buffer = append(w.buffer, s...)
	}
}

// line writes one series of the open family.
func (w *pageWriter) line(labels, tail string, v float64) {
	w.start(labels, tail)
	w.buffer = append(appendValue(w.buffer, v), '\n')
}

func (w *pageWriter) start(labels, tail string) {
	w.buffer = append(w.buffer, w.name...)
	w.buffer = append(w.buffer, labels...)
	w.buffer = append(w.buffer, tail...)
}

// scalar writes a family of one series without labels.
func (w *pageWriter) scalar(name, help string, v float64) {
	w.family(name, "gauge", help)
	w.line(" ", "", v)
}

// timestamp writes a family of one series without labels, of a moment.
func (w *pageWriter) timestamp(name, help string, at engine.Instant) {
	w.family(name, "gauge", help)
	w.start(" ", "")
	w.buffer = append(appendSeconds(w.buffer, at), '\n')
}

// appendValue writes v with as few digits as give it back, so that the page
// carries the same float64 as the JSON answers.
func appendValue(b []byte, v float64) []byte {
	if v == math.Trunc(v) && math.Abs(v) < 1e15 && (v != 0 || !math.Signbit(v)) {
		return strconv.AppendInt(b, int64(v), 10)
	}
	return strconv.AppendFloat(b, v, 'g', -1, 64)
}

// appendSeconds writes a moment in seconds with all its decimals: a division
// would round twice.
func appendSeconds(b []byte, at engine.Instant) []byte {
	if at < 0 {
		b, at = append(b, '-'), -at
	}
	b = strconv.AppendInt(b, int64(at/1e9), 10)
	rest := at % 1e9
	if rest == 0 {
		return b
	}
	b = append(b, '.')
	for digit := engine.Instant(1e8); rest > 0; digit /= 10 {
		b = append(b, byte('0'+rest/digit))
		rest %= digit
	}
	return b
}
