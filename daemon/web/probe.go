package web

import (
	"context"
	"encoding/json"
	"fmt"
	"net/http"
	"runtime"
	"runtime/debug"
	"strings"
	"time"
)

// probeTime is the longest a probe waits. It is below the 10 s after which a
// Prometheus scrape gives up by default.
const probeTime = 5 * time.Second

// livez answers whether the main loop turns: if not, a restart helps.
func (s *Server) livez(w http.ResponseWriter, r *http.Request) {
	ctx, cancel := context.WithTimeout(r.Context(), probeTime)
	defer cancel()
	if err := s.opt.Source.Alive(ctx); err != nil {
		http.Error(w, "not alive: "+oneLine(err.Error()), http.StatusServiceUnavailable)
		return
	}
	text(w, "alive\n")
}

// readyz answers whether work gets done: if not, it says what is in the way.
func (s *Server) readyz(w http.ResponseWriter, r *http.Request) {
	ctx, cancel := context.WithTimeout(r.Context(), probeTime)
	defer cancel()
	checks := s.opt.Source.Ready(ctx)
	var bad, list strings.Builder
	for _, c := range checks {
		mark := "ok  "
		line := oneLine(c.Name)
		if c.Detail != "" {
			line += ": " + oneLine(c.Detail)
		}
		if !c.OK {
			mark = "FAIL"
			fmt.Fprintf(&bad, "%s\n", line)
		}
		fmt.Fprintf(&list, "%s  %s\n", mark, line)
	}
	if len(checks) == 0 {
		bad.WriteString("no checks were made\n")
	}
	out := bad.String()
	if r.URL.Query().Has("verbose") {
		out = list.String()
	}
	if bad.Len() > 0 {
		http.Error(w, "not ready\n"+strings.TrimSuffix(out, "\n"), http.StatusServiceUnavailable)
		return
	}
	text(w, "ready\n"+out)
}

// oneLine keeps a detail from looking like a line of its own.
func oneLine(s string) string { return strings.Join(strings.Fields(s), " ") }

func text(w http.ResponseWriter, s string) {
	w.Header().Set("Content-Type", "text/plain; charset=utf-8")
	_, _ = w.Write([]byte(s))
}

// version answers GET /version.
func (s *Server) version(w http.ResponseWriter, _ *http.Request) {
	facts := map[string]string{"name": "unsheard", "version": s.opt.Version,
		"go": runtime.Version(), "os": runtime.GOOS, "arch": runtime.GOARCH}
	if b, ok := debug.ReadBuildInfo(); ok {
		for _, v := range b.Settings {
			switch v.Key {
			case "vcs.revision":
				facts["revision"] = v.Value
			case "vcs.time":
				facts["time"] = v.Value
			}
		}
	}
	w.Header().Set("Content-Type", "application/json")
	enc := json.NewEncoder(w)
	enc.SetIndent("", "  ")
	_ = enc.Encode(facts)
}
