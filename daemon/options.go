package daemon

import (
	"errors"
	"fmt"
	"path/filepath"
	"runtime"

	"github.com/prometheus/client_golang/prometheus"
	"go.uber.org/zap"

	"unsheard/config"
	"unsheard/pipeline"
)

// Options of a Daemon.
type Options struct {
	// Config is the loaded configuration. Required.
	Config *config.Config

	// Registry takes the service's metrics and is served at /metrics.
	// Default: a new one.
	Registry *prometheus.Registry

	// Logger receives the service's log. Default: none.
	Logger *zap.Logger

	// Executable is this program's own file, run as the worker process.
	// Default: the running program.
	Executable string

	// Version is shown on the page. Default pipeline.Version.
	Version string

	// Started is called once with the page's address, when everything
	// runs. Default: nothing.
	Started func(page string)
}

func (o Options) fill() (Options, error) {
	if o.Config == nil {
		return o, errors.New("daemon: no configuration")
	}
	if o.Registry == nil {
		o.Registry = prometheus.NewRegistry()
	}
	if o.Logger == nil {
		o.Logger = zap.NewNop()
	}
	if o.Executable == "" {
		exe, err := Executable()
		if err != nil {
			return o, err
		}
		o.Executable = exe
	}
	if o.Version == "" {
		o.Version = pipeline.Version
	}
	if o.Started == nil {
		o.Started = func(string) {}
	}
	return o, nil
}

// LedgerPath returns the ledger's file under a configuration.
func LedgerPath(c *config.Config) string { return filepath.Join(c.Campaign.State, "ledger.db") }

// slots returns how many full passes run at once.
func slots(c *config.Config) int {
	if c.Work.Slots > 0 {
		return c.Work.Slots
	}
	return max(1, runtime.NumCPU())
}

// memory returns the bytes that all running jobs may use together.
func memory(c *config.Config) (int64, error) {
	n := c.Work.Memory.Bytes(memoryTotal())
	if n <= 0 {
		return 0, fmt.Errorf("work.memory: %v of this computer's memory is nothing", c.Work.Memory)
	}
	return n, nil
}
