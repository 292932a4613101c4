package web

import (
	"errors"
	"strconv"

	"github.com/prometheus/client_golang/prometheus"
)

type metrics struct {
	requests *prometheus.CounterVec
	refused  *prometheus.CounterVec
	streams  prometheus.Gauge
}

func newMetrics(reg prometheus.Registerer) (*metrics, error) {
	m := &metrics{
		requests: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "unsheard_page_requests_total",
			Help: "Requests answered, by class of the HTTP status.",
		}, []string{"class"}),
		refused: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "unsheard_page_refused_total",
			Help: "Requests refused, by reason: unknown host name, too many streams, too many downloads.",
		}, []string{"reason"}),
		streams: prometheus.NewGauge(prometheus.GaugeOpts{
			Name: "unsheard_page_streams",
			Help: "Event streams open, about one per page that is looked at.",
		}),
	}
	for _, reason := range []string{"host", "streams", "downloads"} {
		m.refused.WithLabelValues(reason)
	}
	return m, errors.Join(reg.Register(m.requests), reg.Register(m.refused), reg.Register(m.streams))
}

// count adds one answer; a handler that wrote nothing answered 200.
func (m *metrics) count(code int) {
	class := 2
	if code != 0 {
		class = code / 100
	}
	m.requests.WithLabelValues(strconv.Itoa(class) + "xx").Inc()
}
