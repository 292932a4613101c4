package web

import (
	"context"
	"errors"
	"fmt"
	"net"
	"net/http"
	"sync"
	"time"

	"github.com/prometheus/client_golang/prometheus/promhttp"
	"go.uber.org/zap"
	"golang.org/x/sync/errgroup"
)

// Times of the HTTP server. A page is small and local; a download extends
// its own deadline by its size, a stream by each write.
const (
	headTime  = 5 * time.Second
	readTime  = 10 * time.Second
	writeTime = 15 * time.Second
	idleTime  = 2 * time.Minute
	drainTime = 3 * time.Second
	headBytes = 16 << 10
)

// Server serves the pages.
type Server struct {
	opt     Options
	files   *files
	pages   pages
	cache   *cache
	hub     *hub
	metrics *metrics
	handler http.Handler
	loads   chan struct{} // one token per running download

	mu       sync.Mutex // guards the two below
	listener net.Listener
	ran      bool
}

// New makes a server; it does not listen yet.
func New(o Options) (*Server, error) {
	if err := o.Validate(); err != nil {
		return nil, err
	}
	o = o.fill()
	static, err := loadStatic()
	if err != nil {
		return nil, err
	}
	p, err := loadPages(o.Zone, o.Clock)
	if err != nil {
		return nil, err
	}
	m, err := newMetrics(o.Registry)
	if err != nil {
		return nil, fmt.Errorf("register page metrics: %w", err)
	}
	s := &Server{opt: o, files: static, pages: p, metrics: m,
		cache: newCache(o.Source.Now),
		hub:   newHub(o.Streams),
		loads: make(chan struct{}, o.Downloads)}
	s.handler = s.guard(s.routes())
	return s, nil
}

func (s *Server) routes() *http.ServeMux {
	mux := http.NewServeMux()
	mux.HandleFunc("GET /{$}", s.now)
	mux.HandleFunc("GET /shots", s.shots)
	mux.HandleFunc("GET /shot/{id}", s.shot)
	mux.HandleFunc("GET /shot/{id}/file/{name}", s.file)
	mux.HandleFunc("GET /events", s.events)
	mux.HandleFunc("GET /static/{name}", s.files.serve)
	mux.Handle("GET /metrics", promhttp.HandlerFor(s.opt.Registry, promhttp.HandlerOpts{}))
	mux.HandleFunc("GET /livez", s.livez)
	mux.HandleFunc("GET /readyz", s.readyz)
	mux.HandleFunc("GET /version", s.version)
	mux.HandleFunc("GET /", func(w http.ResponseWriter, r *http.Request) {
		s.fail(w, r, http.StatusNotFound, "There is no such page.")
	})
	return mux
}

// Handler returns the whole server as a handler, for tests and for serving
// on a listener of one's own.
func (s *Server) Handler() http.Handler { return s.handler }

// Listen takes the address. Run does it when it was not done before.
func (s *Server) Listen(ctx context.Context) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.listener != nil {
		return nil
	}
	var lc net.ListenConfig
	l, err := lc.Listen(ctx, "tcp", s.opt.Listen)
	if err != nil {
		return fmt.Errorf("page.listen: take %s: %w; is another unsheard running, or the port in use?", s.opt.Listen, err)
	}
	// "localhost" is whatever the hosts file says.
	if a, ok := l.Addr().(*net.TCPAddr); !ok || !a.IP.IsLoopback() {
		l.Close()
		return fmt.Errorf("%w (%q is %v here)", ErrOpen, s.opt.Listen, l.Addr())
	}
	s.listener = l
	return nil
}

// Addr returns the address listened on, or "" before Listen.
func (s *Server) Addr() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.listener == nil {
		return ""
	}
	return s.listener.Addr().String()
}

// Close gives back an address that Listen took and Run never used.
func (s *Server) Close() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.listener == nil || s.ran {
		return nil
	}
	s.ran = true
	return s.listener.Close()
}

// Run serves until ctx ends, then lets open answers finish for a moment. It
// runs once.
func (s *Server) Run(ctx context.Context) error {
	if ctx.Err() != nil {
		return s.Close()
	}
	if err := s.Listen(ctx); err != nil {
		return err
	}
	s.mu.Lock()
	l, ran := s.listener, s.ran
	s.ran = true
	s.mu.Unlock()
	if ran {
		return errors.New("page: server runs only once")
	}
	log, _ := zap.NewStdLogAt(s.opt.Logger, zap.DebugLevel)
	srv := &http.Server{Handler: s.handler, ErrorLog: log, MaxHeaderBytes: headBytes,
		ReadHeaderTimeout: headTime, ReadTimeout: readTime, WriteTimeout: writeTime, IdleTimeout: idleTime}

	g, ctx := errgroup.WithContext(ctx)
	g.Go(func() error { return s.hub.run(ctx, s.opt.Source.Changed()) })
	g.Go(func() error {
		if err := srv.Serve(l); !errors.Is(err, http.ErrServerClosed) {
			return fmt.Errorf("serve pages on %s: %w", l.Addr(), err)
		}
		return nil
	})
	g.Go(func() error {
		<-ctx.Done()
		stop, cancel := context.WithTimeout(context.WithoutCancel(ctx), drainTime)
		defer cancel()
		if err := srv.Shutdown(stop); err != nil {
			return srv.Close() // a download that outlasts the drain time is cut
		}
		return nil
	})
	return g.Wait()
}
