package queue

import (
	"errors"
	"fmt"
	"os"
	"slices"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"go.uber.org/zap"
)

// Options say how Open opens a ledger.
type Options struct {
	// Path of the ledger's file, on a local disk. Its folder is made if
	// missing. Required.
	Path string
	// Passes that each new shot gets. Quick and Full are queued when the shot
	// is paired, Spread when its full pass is done. Default: Quick and Full.
	// At least one of Quick and Full must be among them.
	Passes []Pass
	// MaxAttempts is how often a pass is tried before it is given up,
	// crashes included. Default 4; 1 never tries again.
	MaxAttempts int
	// Logger receives what nobody is returned. Default: none.
	Logger *zap.Logger
	// Registerer receives the metrics until Close. Default: none.
	Registerer prometheus.Registerer
	// Clock gives the time written into the ledger. Default: time.Now.
	// River keeps its own time: Clock does not move jobs.
	Clock func() time.Time
	// Host is written into each attempt. Default: the machine's name.
	Host string
}

func (o Options) fill() Options {
	if len(o.Passes) == 0 {
		o.Passes = []Pass{Quick, Full}
	}
	if o.MaxAttempts == 0 {
		o.MaxAttempts = 4
	}
	if o.Logger == nil {
		o.Logger = zap.NewNop()
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	if o.Host == "" {
		o.Host, _ = os.Hostname()
	}
	return o
}

// Validate lists every fault.
func (o Options) Validate() error {
	var errs []error
	if o.Path == "" {
		errs = append(errs, errors.New("option Path is empty: name the ledger's file"))
	}
	if o.MaxAttempts < 0 {
		errs = append(errs, fmt.Errorf("option MaxAttempts is %d: it must be at least 1 (0: 4)", o.MaxAttempts))
	}
	for _, p := range o.Passes {
		if p != Quick && p != Full && p != Spread {
			errs = append(errs, fmt.Errorf("option Passes has %q: it must be quick, full or spread", p))
		}
	}
	if len(o.Passes) > 0 && !slices.Contains(o.Passes, Full) && !slices.Contains(o.Passes, Quick) {
		errs = append(errs, errors.New("option Passes has neither quick nor full: one of them must finish a shot"))
	}
	if slices.Contains(o.Passes, Spread) && !slices.Contains(o.Passes, Full) {
		errs = append(errs, errors.New("option Passes has spread without full: spread follows the full pass"))
	}
	return errors.Join(errs...)
}

// first returns the passes queued when a shot is paired.
func (o Options) first() []Pass {
	return slices.DeleteFunc(slices.Clone(o.Passes), func(p Pass) bool { return p == Spread })
}

// RunOptions say how Run works the queue.
type RunOptions struct {
	// Slots is how many full and spread passes run at once. Default 1.
	Slots int
	// QuickSlots is how many quick looks run at once, beside Slots. Default 1.
	QuickSlots int
	// SoftStop is how long running work may go on after Run's context ended,
	// before its own context is cancelled. Default 30 s; negative: not at all.
	SoftStop time.Duration
	// Timeout is the longest that one attempt may take; then its context is
	// cancelled and the attempt has failed. It must lie well above the longest
	// honest job. Default 1 h; negative: no limit.
	Timeout time.Duration
	// Backoff gives the pause before attempt n+1, n = 1, 2, … being the number
	// of attempts already used. Default 2 s, 8 s, 30 s, then 2 min.
	Backoff func(n int) time.Duration
}

func (o RunOptions) fill() RunOptions {
	o.Slots = max(o.Slots, 1)
	o.QuickSlots = max(o.QuickSlots, 1)
	switch {
	case o.SoftStop == 0:
		o.SoftStop = 30 * time.Second
	case o.SoftStop < 0:
		o.SoftStop = time.Millisecond // River takes 0 for "cancel, and call it a failure"
	}
	if o.Timeout == 0 {
		o.Timeout = time.Hour
	}
	if o.Backoff == nil {
		o.Backoff = backoff
	}
	return o
}

func backoff(n int) time.Duration {
	steps := []time.Duration{2 * time.Second, 8 * time.Second, 30 * time.Second, 2 * time.Minute}
	return steps[min(max(n, 1), len(steps))-1]
}
