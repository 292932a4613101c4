package queue

import (
	"context"
	"fmt"
	"time"

	"github.com/prometheus/client_golang/prometheus"
)

// scrapeTimeout bounds the queries of one scrape.
const scrapeTimeout = 5 * time.Second

// metrics counts attempts as they end, and asks the ledger for the rest when it
// is scraped: the ledger is the truth, also about what earlier processes left.
type metrics struct {
	reg      prometheus.Registerer
	read     *Reader
	attempts *prometheus.CounterVec
	shots    *prometheus.Desc
	depth    *prometheus.Desc
	oldest   *prometheus.Desc
}

func newMetrics(reg prometheus.Registerer, read *Reader) (*metrics, error) {
	m := &metrics{
		reg: reg, read: read,
		attempts: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "unsheard_attempts_total",
			Help: "Attempts at shots that ended since the service started.",
		}, []string{"pass", "outcome"}),
		shots:  prometheus.NewDesc("unsheard_shots", "Shots in the ledger.", []string{"state"}, nil),
		depth:  prometheus.NewDesc("unsheard_queue_depth", "Jobs that wait, retries and pauses included.", []string{"pass"}, nil),
		oldest: prometheus.NewDesc("unsheard_queue_oldest_age_seconds", "Time since the longest waiting job was queued, 0 if none waits.", []string{"pass"}, nil),
	}
	for _, p := range []Pass{Quick, Full, Spread} {
		for _, o := range []string{OutcomeDone, OutcomeFailed, OutcomeGivenUp} {
			m.attempts.WithLabelValues(string(p), o) // so that a rate is 0 before the first, not absent
		}
	}
	if reg == nil {
		return m, nil
	}
	if err := reg.Register(m); err != nil {
		return nil, fmt.Errorf("register metrics: %w", err)
	}
	return m, nil
}

func (m *metrics) unregister() {
	if m.reg != nil {
		m.reg.Unregister(m)
	}
}

func (m *metrics) attempt(p Pass, outcome string) {
	m.attempts.WithLabelValues(string(p), outcome).Inc()
}

// Describe implements prometheus.Collector.
func (m *metrics) Describe(c chan<- *prometheus.Desc) {
	m.attempts.Describe(c)
	c <- m.shots
	c <- m.depth
	c <- m.oldest
}

// Collect implements prometheus.Collector.
func (m *metrics) Collect(c chan<- prometheus.Metric) {
	m.attempts.Collect(c)
	ctx, cancel := context.WithTimeout(context.Background(), scrapeTimeout)
	defer cancel()
	counts, err := m.read.Counts(ctx, "")
	if err != nil {
		c <- prometheus.NewInvalidMetric(m.shots, err)
		return
	}
	for state, n := range counts {
		c <- prometheus.MustNewConstMetric(m.shots, prometheus.GaugeValue, float64(n), string(state))
	}
	depths, err := m.read.QueueDepth(ctx)
	if err != nil {
		c <- prometheus.NewInvalidMetric(m.depth, err)
		return
	}
	for pass, d := range depths {
		c <- prometheus.MustNewConstMetric(m.depth, prometheus.GaugeValue, float64(d.Jobs), string(pass))
		c <- prometheus.MustNewConstMetric(m.oldest, prometheus.GaugeValue, d.Oldest.Seconds(), string(pass))
	}
}
