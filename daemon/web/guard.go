package web

import (
	"net"
	"net/http"
	"net/netip"
	"strings"

	"go.uber.org/zap"
)

// policy lets a page load only what this server serves under its own name.
const policy = "default-src 'none'; style-src 'self'; script-src 'self'; img-src 'self'; " +
	"connect-src 'self'; form-action 'self'; base-uri 'none'; frame-ancestors 'none'"

// guard wraps every route: headers, Host, method, cross-origin writes.
func (s *Server) guard(next http.Handler) http.Handler {
	next = http.NewCrossOriginProtection().Handler(next)
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		h := w.Header()
		h.Set("Content-Security-Policy", policy)
		h.Set("X-Content-Type-Options", "nosniff")
		h.Set("X-Frame-Options", "DENY")
		h.Set("Referrer-Policy", "no-referrer")
		h.Set("Cross-Origin-Opener-Policy", "same-origin")
		h.Set("Cross-Origin-Resource-Policy", "same-origin")
		h.Set("Cache-Control", "no-store")

		count := &counter{ResponseWriter: w}
		defer func() { s.metrics.count(count.code) }()
		if !s.knownHost(r.Host) {
			s.metrics.refused.WithLabelValues("host").Inc()
			s.opt.Logger.Info("request refused: unknown host name", zap.String("host", r.Host))
			http.Error(count, "This page answers only to localhost and the address it listens on.", http.StatusForbidden)
			return
		}
		next.ServeHTTP(count, r)
	})
}

// knownHost defends against a foreign page whose name was made to resolve to
// this computer: its requests arrive here, but with its own name as Host. A
// loopback address as Host cannot be such a name.
func (s *Server) knownHost(host string) bool {
	if name, _, err := net.SplitHostPort(host); err == nil {
		host = name
	}
	host = strings.TrimSuffix(strings.TrimPrefix(host, "["), "]")
	if strings.EqualFold(host, "localhost") {
		return true
	}
	ip, err := netip.ParseAddr(host)
	return err == nil && ip.Zone() == "" && ip.Unmap().IsLoopback()
}

// counter remembers the status for the metrics.
type counter struct {
	http.ResponseWriter
	code int
}

func (c *counter) WriteHeader(code int) {
	if c.code == 0 {
		c.code = code
	}
	c.ResponseWriter.WriteHeader(code)
}

func (c *counter) Write(b []byte) (int, error) {
	if c.code == 0 {
		c.code = http.StatusOK
	}
	return c.ResponseWriter.Write(b)
}

// Unwrap lets http.ResponseController reach the connection.
func (c *counter) Unwrap() http.ResponseWriter { return c.ResponseWriter }
