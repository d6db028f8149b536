package server

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net/http"
	"runtime"
	"strings"
	"sync"
	"sync/atomic"
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
	WriteTimeout  time.Duration // in which a client has to take the next part of a page; 0 means 5 s
}

// DefaultMaxQuantities bounds the page: 10,000 quantities are 150,000 series,
// about what one Prometheus target should carry (common practice, no source).
const DefaultMaxQuantities = 10_000

const (
	defaultWriteTimeout = 5 * time.Second
	// maxPages bounds the pages being sent at once, and so the memory that
	// clients who stop reading can hold. Who comes next waits for a client to
	// finish, or takes the place of one who stopped reading; see senders.
	maxPages = 8
	// maxParts bounds the cores that a rendering uses.
	maxParts = 4
	// textFormat is the only format served: the quantities are written in it
	// directly.
	textFormat = "text/plain; version=0.0.4; charset=utf-8"
)

// Metrics serves the Prometheus page: first the quantities, then the service.
//
// One scrape at a time evaluates all beliefs, at one instant, and writes the
// page into memory; sending it then needs no lock, so that a client who reads
// slowly holds up neither ingest nor other scrapes. The memory is used again:
// a page costs next to no garbage. A Collector that makes an object of every
// series would cost some 60 MB of it for 10,000 quantities (measured).
type Metrics struct {
	keeper   metricsKeeper
	registry *prometheus.Registry
	now      func() time.Time
	max      int
	ready    func() error
	logger   *slog.Logger
	timeout  time.Duration

	slots   chan struct{} // holds a token for each page in use
	senders senders

	freeMu sync.Mutex
	free   []*exposition // guarded by freeMu; the one used last is on top

	rendering sync.Mutex
	known     []known  // guarded by rendering; one for each track, in their order
	chosen    []chosen // guarded by rendering; of the page being rendered
}

// known is what the last page said of a quantity, and can be said again.
type known struct {
	track    *engine.Track
	quantity *engine.Quantity // for which labels were made
	labels   *quantityLabels
	numbers  numberTexts
}

// chosen is a quantity that the page carries.
type chosen struct {
	known *known
	view  *engine.View
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
		slots: make(chan struct{}, maxPages),
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
	x, err := m.take(r.Context())
	if err != nil {
		return // the client has given up
	}
	defer m.give(x)
	m.render(x)

	send := x.send
	h := w.Header()
	h.Set("Content-Type", textFormat)
	h.Set("Vary", "Accept-Encoding")
	if acceptsGzip(r.Header.Values("Accept-Encoding")) {
		h.Set("Content-Encoding", "gzip")
		send = x.sendZipped
	}
	to := m.senders.begin(w, m.timeout)
	err = send(to)
	if err == nil {
		err = to.flush()
	}
	m.senders.end(to)
	if err != nil {
		m.logger.Warn("metrics page was cut off", "error", err, "client", r.RemoteAddr)
	}
}

// take waits for a page to be free.
func (m *Metrics) take(ctx context.Context) (*exposition, error) {
	if err := m.takeSlot(ctx); err != nil {
		return nil, err
	}
	m.freeMu.Lock()
	defer m.freeMu.Unlock()
	if n := len(m.free); n > 0 {
		x := m.free[n-1]
		m.free = m.free[:n-1]
		return x, nil
	}
	return newExposition(min(runtime.GOMAXPROCS(0), maxParts)), nil
}

// takeSlot waits for a slot. While there is none it has clients cut who don't
// read, one at a time.
func (m *Metrics) takeSlot(ctx context.Context) error {
	for {
		select {
		case m.slots <- struct{}{}:
			return nil
		default:
		}
		retry := time.NewTimer(m.senders.cutOne())
		select {
		case m.slots <- struct{}{}:
			retry.Stop()
			return nil
		case <-ctx.Done():
			retry.Stop()
			return ctx.Err()
		case <-retry.C:
		}
	}
}

func (m *Metrics) give(x *exposition) {
	m.freeMu.Lock()
	m.free = append(m.free, x)
	m.freeMu.Unlock()
	<-m.slots
}

// render writes every live quantity at one instant, and then the service.
func (m *Metrics) render(x *exposition) {
	m.rendering.Lock()
	defer m.rendering.Unlock()
	x.reset()
	unpublished, rebuilding := m.choose()
	at := cutToMillisecond(engine.InstantOf(m.now()))
	unevaluated := m.quantities(x, at)
	x.timestamp("leadline_evaluation_timestamp_seconds",
		"Instant at which the beliefs of this page were evaluated, in seconds since 1970.", at)
	x.scalar("leadline_quantities", "Live quantities.", float64(len(m.chosen)+unpublished))
	x.scalar("leadline_unpublished_quantities",
		"Live quantities left out of this page because it is bounded.", float64(unpublished))
	x.scalar("leadline_unevaluated_quantities",
		"Quantities of this page whose belief could not be evaluated.", float64(unevaluated))
	x.scalar("leadline_rebuilding_quantities",
		"Live quantities whose belief is being rebuilt and is the one before it.", float64(rebuilding))
	m.service(x)
	clear(m.chosen) // lets go of the views
}

// choose picks the first live quantities by ID and counts the others, and those
// of all that are being rebuilt.
func (m *Metrics) choose() (unpublished, rebuilding int) {
	tracks := m.keeper.Tracks()
	m.align(tracks)
	m.chosen = m.chosen[:0]
	for i, t := range tracks {
		v := t.View()
		if v != nil && v.Rebuilding && !v.Quantity.Retired {
			rebuilding++
		}
		switch {
		case v == nil || v.Quantity.Retired:
			m.known[i] = known{track: t}
		case len(m.chosen) == m.max:
			unpublished++
		default:
			m.chosen = append(m.chosen, chosen{&m.known[i], v})
		}
	}
	return unpublished, rebuilding
}

// quantities writes the chosen quantities, an equal run of them to each part. A
// panic in one of the goroutines is handed on to the request's.
func (m *Metrics) quantities(x *exposition, at engine.Instant) (unevaluated int64) {
	var all sync.WaitGroup
	var failed atomic.Int64
	panics := make(chan error, len(x.parts))
	for i, p := range x.parts {
		run := m.chosen[len(m.chosen)*i/len(x.parts) : len(m.chosen)*(i+1)/len(x.parts)]
		all.Go(func() {
			err := recovered(func() error {
				for _, c := range run {
					if !m.quantity(p, c, at) {
						failed.Add(1)
					}
				}
				return nil
			})
			if err != nil {
				panics <- err
			}
		})
	}
	all.Wait()
	select {
	case err := <-panics:
		panic(err)
	default:
		return failed.Load()
	}
}

// quantity writes one quantity; false means that its belief could not be
// evaluated and is left out.
func (m *Metrics) quantity(p *part, c chosen, at engine.Instant) bool {
	v, k := c.view, c.known
	f, err := m.keeper.Figures(v, at)
	if err != nil {
		f = engine.Figures{ReadingCount: v.ReadingCount, HasLast: v.HasLast, LastTime: v.LastTime}
	}
	if k.quantity != v.Declared() {
		k.quantity, k.labels = v.Declared(), labelsOf(v.Declared())
	}
	k.numbers.update(&f)
	p.quantity(k.labels, &k.numbers)
	return err == nil
}

// align keeps known in step with the tracks, whose number only grows.
func (m *Metrics) align(tracks []*engine.Track) {
	if len(tracks) == len(m.known) {
		return
	}
	before := make(map[*engine.Track]known, len(m.known))
	for _, k := range m.known {
		before[k.track] = k
	}
	m.known = make([]known, len(tracks))
	for i, t := range tracks {
		m.known[i] = before[t]
		m.known[i].track = t
	}
}

// service appends the metrics of the service; what could be gathered is
// written even if a part failed.
func (m *Metrics) service(x *exposition) {
	families, err := m.registry.Gather()
	if err != nil {
		m.logger.Error("metrics of the service are incomplete", "error", err)
	}
	e := expfmt.NewEncoder(x, expfmt.NewFormat(expfmt.TypeTextPlain))
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
