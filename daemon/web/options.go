package web

import (
	"errors"
	"fmt"
	"net"
	"net/netip"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"go.uber.org/zap"
)

// Options of a Server.
type Options struct {
	// Listen is the address, host:port; only loopback is accepted. Port 0
	// takes a free one. Default 127.0.0.1:8787.
	Listen string

	// Source is what the pages show. Required.
	Source Source

	// Registry receives the server's own metrics and is served at
	// /metrics. Required.
	Registry interface {
		prometheus.Registerer
		prometheus.Gatherer
	}

	// Logger receives refusals and faults. Default: none.
	Logger *zap.Logger

	// Version is shown at /version and in the foot of every page.
	// Default "unknown".
	Version string

	// Behind is the age of the oldest waiting shot from which on the queue
	// is said to fall behind. Default 60 s.
	Behind time.Duration

	// Streams bounds the open event streams; more are answered with 503
	// and poll instead. Default 32.
	Streams int

	// Downloads bounds the result files sent at once. Default 16.
	Downloads int

	// Limit is the number of shots on one page of the table. Default 50.
	Limit int

	// Zone is the time zone of the times shown. Default: the computer's.
	Zone *time.Location

	// Clock tells the time of day, for ages and for leaving out today's
	// date. Default time.Now.
	Clock func() time.Time
}

func (o Options) fill() Options {
	if o.Listen == "" {
		o.Listen = "127.0.0.1:8787"
	}
	if o.Logger == nil {
		o.Logger = zap.NewNop()
	}
	if o.Version == "" {
		o.Version = "unknown"
	}
	if o.Behind == 0 {
		o.Behind = time.Minute
	}
	if o.Streams == 0 {
		o.Streams = 32
	}
	if o.Downloads == 0 {
		o.Downloads = 16
	}
	if o.Limit == 0 {
		o.Limit = 50
	}
	if o.Zone == nil {
		o.Zone = time.Local
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	return o
}

// Validate lists every fault of the options.
func (o Options) Validate() error {
	var faults []error
	if o.Source == nil {
		faults = append(faults, errors.New("page: no source"))
	}
	if o.Registry == nil {
		faults = append(faults, errors.New("page: no registry"))
	}
	for _, n := range []struct {
		name string
		v    int
	}{{"streams", o.Streams}, {"downloads", o.Downloads}, {"limit", o.Limit}} {
		if n.v < 0 {
			faults = append(faults, fmt.Errorf("page.%s: %d is negative", n.name, n.v))
		}
	}
	if o.Behind < 0 {
		faults = append(faults, fmt.Errorf("page.behind: %v is negative", o.Behind))
	}
	if o.Listen != "" {
		faults = append(faults, checkListen(o.Listen))
	}
	return errors.Join(faults...)
}

// ErrOpen is the refusal of an address that others can reach.
var ErrOpen = errors.New("page.listen: authentication is not available in this version, use a loopback address")

// checkListen accepts localhost and loopback addresses. Other names are
// refused unresolved: what a name means can change after the check.
func checkListen(listen string) error {
	host, _, err := net.SplitHostPort(listen)
	if err != nil {
		return fmt.Errorf("page.listen: %q is not host:port, write for example 127.0.0.1:8787: %w", listen, err)
	}
	if host == "localhost" {
		return nil
	}
	if ip, err := netip.ParseAddr(host); err == nil && ip.Unmap().IsLoopback() {
		return nil
	}
	return fmt.Errorf("%w, for example 127.0.0.1:8787 (not %q)", ErrOpen, listen)
}
