package server

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net/http"
	"strings"
	"sync"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/common/expfmt"

	"leadline.example/engine"
)

// metricsKeeper is what the page needs of the keeper.
type metricsKeeper interface {
	Tracks() []*engine.Track
	Figures(v *engine.View, at engine.Instant) (engine.Figures, error)
	Stats() engine.Stats
	Health() error
}

// MetricsOptions configures Metrics.
type MetricsOptions struct {
	Keeper        *engine.Keeper
	Observations  *Observations
	Now           func() time.Time
	MaxQuantities int           // published, first by ID; 0 means DefaultMaxQuantities
	LedgerBytes   func() int64  // size of the ledger's file; nil publishes none
	Ready         func() error  // nil while the service takes requests; nil func: the keeper's health
	Logger        *slog.Logger  // nil: slog.Default
	WriteTimeout  time.Duration // for a page, from its first byte to its last; 0 means 30 s
}

// DefaultMaxQuantities bounds the page: 10,000 quantities are 150,000 series,
// about what one Prometheus target should carry (common practice, no source).
const DefaultMaxQuantities = 10_000

const (
	defaultWriteTimeout = 30 * time.Second
	// maxScrapes bounds the pages being written at once, and so the memory
	// that clients who stop reading can hold; the next ones wait.
	maxScrapes = 16
	// textFormat is the only format served: the quantities are written in it
	// directly.
	textFormat = "text/plain; version=0.0.4; charset=utf-8"
)

// Metrics serves the Prometheus page: first the quantities, then the service.
//
// One scrape at a time evaluates the beliefs, all at one instant, into a slice
// of its own; formatting and sending then need no lock, so that a client who
// reads slowly holds up neither ingest nor other scrapes. The slices and
// buffers are used again: a page costs next to no garbage. A Collector that
// makes an object of every series would cost some 60 MB of it for 10,000
// quantities (measured).
type Metrics struct {
	keeper   metricsKeeper
	registry *prometheus.Registry
	now      func() time.Time
	max      int
	ready    func() error
	logger   *slog.Logger
	timeout  time.Duration
	families []family

	slots chan struct{} // holds a token for each page being written

	freeMu sync.Mutex
	free   []*scrape // guarded by freeMu; the one used last is on top

	evaluating sync.Mutex
	labels     map[*engine.Track]labelled // guarded by evaluating
}

// labelled are the labels made for one revision of a quantity.
type labelled struct {
	quantity *engine.Quantity
	labels   *quantityLabels
}

// scrape is what one rendering of the page works on.
type scrape struct {
	at          engine.Instant
	quantities  []published
	unpublished int // beyond the bound
	unevaluated int // of which the belief could not be evaluated
	writer      *pageWriter
}

func (o *MetricsOptions) validate() error {
	switch {
	case o.Keeper == nil:
		return errors.New("MetricsOptions.Keeper is nil; give the keeper whose beliefs are published")
	case o.Observations == nil:
		return errors.New("MetricsOptions.Observations is nil; give the one the ledger reports to")
	case o.Now == nil:
		return errors.New("MetricsOptions.Now is nil; give the service's clock")
	case o.MaxQuantities < 0:
		return errors.New("MetricsOptions.MaxQuantities is below 0; give the number of quantities to publish at most")
	}
	return nil
}

// NewMetrics returns the page of a keeper. Observations can serve one page.
func NewMetrics(o MetricsOptions) (*Metrics, error) {
	if err := o.validate(); err != nil {
		return nil, err
	}
	m := newPage(o.Keeper, o)
	if err := o.Observations.watch(o.Keeper, m.ready, o.LedgerBytes); err != nil {
		return nil, fmt.Errorf("publish metrics of the keeper: %w", err)
	}
	return m, nil
}

func newPage(k metricsKeeper, o MetricsOptions) *Metrics {
	m := &Metrics{
		keeper: k, registry: o.Observations.registry, now: o.Now, max: o.MaxQuantities,
		ready: o.Ready, logger: o.Logger, timeout: o.WriteTimeout,
		families: families(),
		slots:    make(chan struct{}, maxScrapes),
		labels:   map[*engine.Track]labelled{},
	}
	if m.max == 0 {
		m.max = DefaultMaxQuantities
	}
	if m.ready == nil {
		m.ready = k.Health
	}
	if m.logger == nil {
		m.logger = slog.Default()
	}
	if m.timeout == 0 {
		m.timeout = defaultWriteTimeout
	}
	return m
}

// ServeHTTP writes the page, compressed by gzip if the client takes it.
func (m *Metrics) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	s, err := m.take(r.Context())
	if err != nil {
		return // the client has given up
	}
	defer m.give(s)
	m.evaluate(s)

	zipped := acceptsGzip(r.Header.Values("Accept-Encoding"))
	h := w.Header()
	h.Set("Content-Type", textFormat)
	h.Set("Vary", "Accept-Encoding")
	if zipped {
		h.Set("Content-Encoding", "gzip")
	}
	// Recorders and other writers that have no deadline are served without.
	c := http.NewResponseController(w)
	_ = c.SetWriteDeadline(time.Now().Add(m.timeout))
	if err := m.write(s, w, zipped); err != nil {
		m.logger.Warn("metrics page was cut off", "error", err, "client", r.RemoteAddr)
		return
	}
	_ = c.Flush()
	_ = c.SetWriteDeadline(time.Time{}) // the next request on the connection has its own
}

// take waits for a slot.
func (m *Metrics) take(ctx context.Context) (*scrape, error) {
	select {
	case m.slots <- struct{}{}:
	case <-ctx.Done():
		return nil, ctx.Err()
	}
	m.freeMu.Lock()
	defer m.freeMu.Unlock()
	if n := len(m.free); n > 0 {
		s := m.free[n-1]
		m.free = m.free[:n-1]
		return s, nil
	}
	return &scrape{writer: newPageWriter()}, nil
}

func (m *Metrics) give(s *scrape) {
	m.freeMu.Lock()
	m.free = append(m.free, s)
	m.freeMu.Unlock()
	<-m.slots
}

// evaluate fills s with every live quantity at one instant.
func (m *Metrics) evaluate(s *scrape) {
	m.evaluating.Lock()
	defer m.evaluating.Unlock()
	s.at = cutToMillisecond(engine.InstantOf(m.now()))
	s.quantities, s.unpublished, s.unevaluated = s.quantities[:0], 0, 0
	for _, t := range m.keeper.Tracks() {
		v := t.View()
		switch {
		case v == nil || v.Quantity.Retired:
			delete(m.labels, t)
		case len(s.quantities) == m.max:
			s.unpublished++
		default:
			m.add(s, t, v)
		}
	}
}

func (m *Metrics) add(s *scrape, t *engine.Track, v *engine.View) {
	f, err := m.keeper.Figures(v, s.at)
	if err != nil {
		s.unevaluated++
		f = engine.Figures{ReadingCount: v.ReadingCount, HasLast: v.HasLast, LastTime: v.LastTime}
	}
	l := m.labels[t]
	if l.quantity != v.Quantity {
		l = labelled{v.Quantity, labelsOf(v.Quantity)}
		m.labels[t] = l
	}
	s.quantities = append(s.quantities, published{
		labels: l.labels, tolerance: v.Quantity.Declaration.Tolerance, Figures: f,
	})
}

func (m *Metrics) write(s *scrape, out http.ResponseWriter, zipped bool) error {
	w := s.writer
	if err := w.begin(out, zipped); err != nil {
		return err
	}
	w.quantities(m.families, s.quantities)
	w.timestamp("leadline_evaluation_timestamp_seconds",
		"Instant at which the beliefs of this page were evaluated, in seconds since 1970.", s.at)
	w.scalar("leadline_quantities", "Live quantities.", float64(len(s.quantities)+s.unpublished))
	w.scalar("leadline_unpublished_quantities",
		"Live quantities left out of this page because it is bounded.", float64(s.unpublished))
	w.scalar("leadline_unevaluated_quantities",
		"Quantities of this page whose belief could not be evaluated.", float64(s.unevaluated))
	m.writeService(w)
	return w.end()
}

// writeService appends the metrics of the service; what could be gathered is
// written even if a part failed.
func (m *Metrics) writeService(w *pageWriter) {
	families, err := m.registry.Gather()
	if err != nil {
		m.logger.Error("metrics of the service are incomplete", "error", err)
	}
	e := expfmt.NewEncoder(w, expfmt.NewFormat(expfmt.TypeTextPlain))
	for _, f := range families {
		if err := e.Encode(f); err != nil {
			m.logger.Error("metric of the service can't be written", "metric", f.GetName(), "error", err)
		}
	}
}

const nanosPerMilli = 1_000_000

// cutToMillisecond rounds down, so that nothing after now is evaluated.
func cutToMillisecond(i engine.Instant) engine.Instant {
	r := i % nanosPerMilli
	if r < 0 {
		r += nanosPerMilli
	}
	return i - r
}

// acceptsGzip tells whether Accept-Encoding names gzip with a weight above 0
// (RFC 9110, 12.5.3).
func acceptsGzip(headers []string) bool {
	for _, header := range headers {
		for coding := range strings.SplitSeq(header, ",") {
			name, weight, _ := strings.Cut(coding, ";")
			if strings.EqualFold(strings.TrimSpace(name), "gzip") {
				return !isZeroWeight(weight)
			}
		}
	}
	return false
}

// isZeroWeight tells whether the parameter is q=0, q=0.0, q=0.00 or q=0.000.
func isZeroWeight(parameter string) bool {
	name, value, _ := strings.Cut(strings.TrimSpace(parameter), "=")
	return strings.EqualFold(strings.TrimSpace(name), "q") && strings.Trim(strings.TrimSpace(value), "0.") == ""
}
