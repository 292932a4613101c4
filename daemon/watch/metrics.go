package watch

import (
	"time"

	"github.com/prometheus/client_golang/prometheus"
)

// Metrics counts for all watchers of a process.
type Metrics struct {
	files *prometheus.CounterVec
	scan  prometheus.Histogram
	alive *prometheus.GaugeVec
}

// NewMetrics makes and registers the metrics.
func NewMetrics(reg prometheus.Registerer) (*Metrics, error) {
	m := &Metrics{
		files: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "unsheard_watch_files_total",
			Help: "Whole, quiet files found.",
		}, []string{"station", "arm"}),
		scan: prometheus.NewHistogram(prometheus.HistogramOpts{
			Name:    "unsheard_watch_scan_seconds",
			Help:    "Time to list a drop folder.",
			Buckets: prometheus.ExponentialBuckets(0.001, 4, 9), // 1 ms to 65 s
		}),
		alive: prometheus.NewGaugeVec(prometheus.GaugeOpts{
			Name: "unsheard_watch_folder_up",
			Help: "1 if the drop folder can be read, 0 if it is missing, stuck or failing.",
		}, []string{"station", "arm"}),
	}
	for _, c := range []prometheus.Collector{m.files, m.scan, m.alive} {
		if err := reg.Register(c); err != nil {
			return nil, err
		}
	}
	return m, nil
}

func (m *Metrics) file(station, arm string) {
	if m != nil {
		m.files.WithLabelValues(station, arm).Inc()
	}
}

func (m *Metrics) scanned(d time.Duration) {
	if m != nil {
		m.scan.Observe(d.Seconds())
	}
}

func (m *Metrics) up(station, arm string, ok bool) {
	if m == nil {
		return
	}
	v := 0.0
	if ok {
		v = 1
	}
	m.alive.WithLabelValues(station, arm).Set(v)
}
