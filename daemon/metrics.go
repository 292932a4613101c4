package daemon

import (
	"time"

	"github.com/prometheus/client_golang/prometheus"
)

// metrics of the work itself; folders, queue and page have their own.
type metrics struct {
	seconds *prometheus.HistogramVec
	errors  *prometheus.CounterVec
}

func newMetrics(reg prometheus.Registerer, version string, slots int, memory int64) *metrics {
	m := &metrics{
		seconds: prometheus.NewHistogramVec(prometheus.HistogramOpts{
			Name: "unsheard_pass_duration_seconds", Help: "Time from the start of a worker process to its answer.",
			Buckets: prometheus.ExponentialBuckets(0.1, 2, 13)}, []string{"pass"}),
		errors: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "unsheard_pass_errors_total", Help: "Worker processes that ended without a result."}, []string{"pass"}),
	}
	build := prometheus.NewGauge(prometheus.GaugeOpts{Name: "unsheard_build_info", Help: "1, with the program's version as label.",
		ConstLabels: prometheus.Labels{"version": version}})
	build.Set(1)
	places := prometheus.NewGauge(prometheus.GaugeOpts{Name: "unsheard_slots", Help: "Full passes that may run at once."})
	places.Set(float64(slots))
	mem := prometheus.NewGauge(prometheus.GaugeOpts{Name: "unsheard_memory_budget_bytes", Help: "Memory that all running passes may use together."})
	mem.Set(float64(memory))
	reg.MustRegister(m.seconds, m.errors, build, places, mem)
	return m
}

func (m *metrics) pass(pass string, took time.Duration, ok bool) {
	m.seconds.WithLabelValues(pass).Observe(took.Seconds())
	if !ok {
		m.errors.WithLabelValues(pass).Inc()
	}
}
