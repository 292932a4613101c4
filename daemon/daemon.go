package daemon

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"github.com/prometheus/client_golang/prometheus/collectors"
	"go.uber.org/zap"

	"unsheard/daemon/watch"
	"unsheard/daemon/web"
	"unsheard/export"
	"unsheard/queue"
)

// Daemon is the service under one configuration.
type Daemon struct {
	o      Options
	store  *queue.Store
	source *source
	web    *web.Server
	worker *worker
	slots  int
	stop   func() // ends the subscription to changes
}

// New opens the ledger and prepares all parts; it starts nothing. The caller
// must Run or Close it.
func New(ctx context.Context, o Options) (*Daemon, error) {
	o, err := o.fill()
	if err != nil {
		return nil, err
	}
	c := o.Config
	mem, err := memory(c)
	if err != nil {
		return nil, err
	}
	passes := []queue.Pass{queue.Full}
	if c.Work.Quick {
		passes = []queue.Pass{queue.Quick, queue.Full}
	}
	store, err := queue.Open(ctx, queue.Options{Path: LedgerPath(c), Passes: passes, MaxAttempts: c.Work.Attempts,
		Logger: o.Logger, Registerer: o.Registry})
	if err != nil {
		return nil, err
	}
	d := &Daemon{o: o, store: store, slots: slots(c), stop: func() {}}
	if err := d.wire(ctx, mem); err != nil {
		return nil, errors.Join(err, d.Close())
	}
	return d, nil
}

func (d *Daemon) wire(ctx context.Context, mem int64) error {
	c := d.o.Config
	b := newBundles()
	d.o.Registry.MustRegister(collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}))
	d.worker = &worker{work: c.Work, keepFree: int64(c.Disk.KeepFree), places: map[string]place{}, folders: map[string]string{},
		bundles: b, budget: newBudget(mem), turns: newTurns(), trouble: newTrouble(d.o.Logger), child: child{d.o.Executable, d.o.Logger}, logger: d.o.Logger,
		metrics: newMetrics(d.o.Registry, d.o.Version, d.slots, mem)}
	d.worker.waiting = d.waiting
	d.source = &source{config: c, store: d.store, bundles: b, worker: d.worker, slots: d.slots}
	wm, err := watch.NewMetrics(d.o.Registry)
	if err != nil {
		return err
	}
	for i := range c.Station {
		s := &c.Station[i]
		d.worker.places[s.Name] = newPlace(c, s)
		d.worker.folders[s.Name] = s.Bundle
		in, err := newIntake(ctx, s, d.store, wm, d.o.Logger)
		if err != nil {
			return err
		}
		d.source.intakes = append(d.source.intakes, in)
	}
	d.source.changes, d.stop = d.store.Changes()
	d.web, err = web.New(web.Options{Listen: c.Page.Listen, Source: d.source, Registry: d.o.Registry,
		Logger: d.o.Logger, Version: d.o.Version})
	return err
}

// Close gives up what New took. It must not be called after Run.
func (d *Daemon) Close() error {
	d.stop()
	return d.store.Close()
}

// waiting is the number of full passes that could run.
func (d *Daemon) waiting() int {
	ctx, cancel := context.WithTimeout(context.Background(), time.Second)
	defer cancel()
	depth, err := d.store.QueueDepth(ctx)
	if err != nil {
		return d.slots // a busy ledger means many shots
	}
	return depth[queue.Full].Jobs
}

// Run is the service: it returns when ctx has ended and everything has
// stopped in order, or when a part cannot go on. It closes the ledger.
func (d *Daemon) Run(ctx context.Context) (err error) {
	defer func() { err = errors.Join(err, d.Close()) }()
	log := d.o.Logger
	if err := d.web.Listen(ctx); err != nil {
		return err
	}
	d.sweep(ctx)

	// The page outlives everything else; the workers outlive the intake.
	page, endPage := context.WithCancel(context.WithoutCancel(ctx))
	defer endPage()
	work, endWork := context.WithCancelCause(ctx)
	defer endWork(nil)
	var wg sync.WaitGroup
	part := func(name string, ctx context.Context, run func(context.Context) error) {
		wg.Go(func() {
			if err := run(ctx); err != nil && !errors.Is(err, context.Canceled) {
				endWork(fmt.Errorf("%s: %w", name, err))
			}
		})
	}
	part("page", page, d.web.Run)
	part("heart", page, d.source.pulse)
	var busy sync.WaitGroup
	for _, in := range d.source.intakes {
		busy.Go(func() {
			if err := in.run(work); err != nil {
				endWork(fmt.Errorf("station %s: %w", in.name, err))
			}
		})
	}
	busy.Go(func() {
		d.source.working.Store(true)
		defer d.source.working.Store(false)
		if err := d.store.Run(work, d.worker, d.runOptions()); err != nil {
			endWork(fmt.Errorf("queue: %w", err))
		}
	})
	log.Info("running", zap.String("page", d.web.Addr()), zap.Int("slots", d.slots), zap.String("campaign", d.o.Config.Campaign.Name))
	d.o.Started("http://" + d.web.Addr() + "/")

	<-work.Done()
	d.source.ending.Store(true)
	log.Info("stopping: running shots may finish", zap.Duration("for", d.o.Config.Work.Stop.Std()))
	busy.Wait()
	endPage()
	wg.Wait()
	log.Info("stopped")
	if cause := context.Cause(work); ctx.Err() == nil {
		return cause
	}
	return nil
}

func (d *Daemon) runOptions() queue.RunOptions {
	w := d.o.Config.Work
	o := queue.RunOptions{Slots: d.slots, QuickSlots: max(1, d.slots/2), SoftStop: w.Stop.Std(), Timeout: w.Timeout.Std()}
	if o.SoftStop <= 0 {
		o.SoftStop = -1
	}
	return o
}

// sweep finishes or removes what a killed process left half published. The
// ledger is ours, so no other process is publishing for it; what somebody
// publishes by hand is spared for a day.
func (d *Daemon) sweep(ctx context.Context) {
	o := export.SweepOptions{Dead: func(name string) bool { return !strings.Contains(name, handTag) }}
	for name, p := range d.worker.places {
		log := d.o.Logger.With(zap.String("station", name))
		err := filepath.WalkDir(p.results, func(path string, e fs.DirEntry, err error) error {
			switch {
			case err != nil:
				if path == p.results {
					return err
				}
				return fs.SkipDir
			case !e.IsDir():
				return nil
			case path != p.results && (strings.HasSuffix(path, suffix) || strings.HasPrefix(e.Name(), ".")):
				return fs.SkipDir
			}
			n, err := export.Sweep(ctx, path, o)
			if n.Removed+n.Finished > 0 {
				log.Info("tidied half-published results", zap.String("folder", path), zap.Int("removed", n.Removed), zap.Int("finished", n.Finished))
			}
			return err
		})
		if err != nil && !errors.Is(err, fs.ErrNotExist) {
			log.Warn("cannot look for half-published results", zap.Error(err))
		}
	}
}
