package server

import (
	"context"
	"errors"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
	"google.golang.org/grpc"
	"google.golang.org/grpc/status"

	"leadline.example/engine"
)

// Observations counts what happens in the service: commits, faults of the
// storage, gRPC requests. It is made before the ledger is opened, so that the
// ledger can report to it, and is published by Metrics.
type Observations struct {
	registry      *prometheus.Registry
	commitSeconds prometheus.Histogram
	groupRecords  prometheus.Histogram
	faults        prometheus.Counter
	requests      *prometheus.CounterVec
}

// NewObservations returns observations of nothing yet, with those of the Go
// runtime and the process beside them.
func NewObservations() *Observations {
	o := &Observations{
		registry: prometheus.NewRegistry(),
		commitSeconds: prometheus.NewHistogram(prometheus.HistogramOpts{
			Name:    "leadline_commit_seconds",
			Help:    "Time that a group of records took to become durable.",
			Buckets: prometheus.ExponentialBuckets(0.00025, 2, 14), // 0.25 ms to 2 s
		}),
		groupRecords: prometheus.NewHistogram(prometheus.HistogramOpts{
			Name:    "leadline_group_records",
			Help:    "Records that became durable together.",
			Buckets: prometheus.ExponentialBuckets(1, 2, 13), // 1 to 4096
		}),
		faults: prometheus.NewCounter(prometheus.CounterOpts{
			Name: "leadline_storage_faults_total",
			Help: "Faults of the storage.",
		}),
		requests: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "leadline_grpc_requests_total",
			Help: "gRPC requests answered, by full method and status code; a stream counts when it ends.",
		}, []string{"method", "code"}),
	}
	o.registry.MustRegister(o.commitSeconds, o.groupRecords, o.faults, o.requests,
		collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}))
	return o
}

// Commit observes a group that became durable.
func (o *Observations) Commit(took time.Duration, records int) {
	o.commitSeconds.Observe(took.Seconds())
	o.groupRecords.Observe(float64(records))
}

// Fault counts a fault of the storage.
func (o *Observations) Fault(error) { o.faults.Inc() }

// UnaryInterceptor counts requests. Only methods that exist reach it, so
// clients can't invent series.
func (o *Observations) UnaryInterceptor(ctx context.Context, request any, info *grpc.UnaryServerInfo, handle grpc.UnaryHandler) (any, error) {
	response, err := handle(ctx, request)
	o.answered(info.FullMethod, err)
	return response, err
}

// StreamInterceptor counts streams when they end.
func (o *Observations) StreamInterceptor(service any, stream grpc.ServerStream, info *grpc.StreamServerInfo, handle grpc.StreamHandler) error {
	err := handle(service, stream)
	o.answered(info.FullMethod, err)
	return err
}

func (o *Observations) answered(method string, err error) {
	s, ok := status.FromError(err)
	if !ok {
		s = status.FromContextError(err)
	}
	o.requests.WithLabelValues(method, s.Code().String()).Inc()
}

// watch publishes what the keeper tells of itself.
func (o *Observations) watch(k keeperState, ready func() error, ledgerBytes func() int64) error {
	err := o.registry.Register(newKeeperCollector(k, ready))
	if ledgerBytes != nil {
		err = errors.Join(err, o.registry.Register(prometheus.NewGaugeFunc(prometheus.GaugeOpts{
			Name: "leadline_ledger_bytes",
			Help: "Size of the ledger's file.",
		}, func() float64 { return float64(ledgerBytes()) })))
	}
	return err
}

// keeperState is what the service's metrics need of the keeper.
type keeperState interface {
	Stats() engine.Stats
	Health() error
}

// keeperCollector reads the keeper's state at each scrape.
type keeperCollector struct {
	keeper keeperState
	ready  func() error

	readings, calibration, queued, position, writable, isReady *prometheus.Desc
}

func newKeeperCollector(k keeperState, ready func() error) *keeperCollector {
	desc := func(name, help string, labels ...string) *prometheus.Desc {
		return prometheus.NewDesc(name, help, labels, nil)
	}
	return &keeperCollector{
		keeper: k, ready: ready,
		readings: desc("leadline_readings_total", "Readings received, by what became of them.", "status", "reason"),
		calibration: desc("leadline_readings_by_calibration_total",
			"Readings applied by an instrument whose calibration was not in force at their time, since the start of the process.", "state"),
		queued:   desc("leadline_queued_readings", "Readings waiting to become durable."),
		position: desc("leadline_ledger_position", "Position of the ledger's last record."),
		writable: desc("leadline_storage_writable", "1 while readings can be stored, else 0."),
		isReady:  desc("leadline_ready", "1 while the service takes requests, else 0."),
	}
}

// Describe implements prometheus.Collector.
func (c *keeperCollector) Describe(out chan<- *prometheus.Desc) {
	for _, d := range [...]*prometheus.Desc{c.readings, c.calibration, c.queued, c.position, c.writable, c.isReady} {
		out <- d
	}
}

// Collect implements prometheus.Collector.
func (c *keeperCollector) Collect(out chan<- prometheus.Metric) {
	s := c.keeper.Stats()
	gauge := func(d *prometheus.Desc, v float64) {
		out <- prometheus.MustNewConstMetric(d, prometheus.GaugeValue, v)
	}
	gauge(c.queued, float64(s.QueuedReadings))
	gauge(c.position, float64(s.Position))
	gauge(c.writable, oneIf(c.keeper.Health() == nil))
	gauge(c.isReady, oneIf(c.ready() == nil))
	for _, k := range everyOutcome() {
		out <- prometheus.MustNewConstMetric(c.readings, prometheus.CounterValue, float64(s.Counts[k]), k.Status.String(), string(k.Reason))
	}
	for _, state := range engine.CalibrationStates {
		if state != engine.CalibrationInForce {
			out <- prometheus.MustNewConstMetric(c.calibration, prometheus.CounterValue, float64(s.Calibration[state]), state.String())
		}
	}
}

// everyOutcome lists what can become of a reading: the series exist from the
// start, at 0, so that the first refusal is seen as an increase.
func everyOutcome() []engine.Outcome {
	out := []engine.Outcome{{Status: engine.Applied}, {Status: engine.Duplicate}}
	for _, r := range engine.ReadingReasons {
		out = append(out, engine.Outcome{Status: engine.Refused, Reason: r})
	}
	return out
}

func oneIf(b bool) float64 {
	if b {
		return 1
	}
	return 0
}
