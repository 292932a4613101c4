package web

import (
	"errors"
	"net/http"
	"net/http/httptest"
	"strings"
	"testing"

	"github.com/prometheus/client_golang/prometheus"
)

func TestHostNames(t *testing.T) {
	h := serve(t, newFake(), nil).Handler()
	for host, want := range map[string]int{
		"localhost": 200, "localhost:8787": 200, "LOCALHOST:1": 200, "127.0.0.1": 200, "127.0.0.1:8787": 200,
		"[::1]": 200, "[::1]:8787": 200, "127.1.2.3:80": 200,
		"": 403, "evil.example": 403, "evil.example:8787": 403, "localhost.evil.example": 403, "127.0.0.1.evil.example:8787": 403,
		"10.0.0.7:8787": 403, "[fe80::1]:8787": 403, "[::1%25eth0]": 403, "localhost:8787:9": 403, "0.0.0.0:8787": 403,
	} {
		for _, path := range []string{"/", "/metrics", "/readyz", "/events", "/shot/68/file/cube.nxs"} {
			if want == 200 && path == "/events" {
				continue // would stay open
			}
			r := httptest.NewRequest("GET", path, nil)
			r.Host = host
			w := httptest.NewRecorder()
			h.ServeHTTP(w, r)
			if w.Code != want {
				t.Errorf("GET %s with Host %q: %d, want %d", path, host, w.Code, want)
			}
		}
	}
}

func TestMethods(t *testing.T) {
	h := serve(t, newFake(), nil).Handler()
	for _, path := range []string{"/", "/shots", "/shot/68", "/shot/68/file/cube.nxs", "/events", "/metrics", "/livez", "/readyz", "/version", "/nowhere"} {
		for _, method := range []string{"POST", "PUT", "DELETE", "PATCH", "OPTIONS", "BREW"} {
			r := httptest.NewRequest(method, path, nil)
			r.Host = "localhost"
			w := httptest.NewRecorder()
			h.ServeHTTP(w, r)
			if w.Code != http.StatusMethodNotAllowed {
				t.Errorf("%s %s: %d, want 405", method, path, w.Code)
			}
			r.Header.Set("Sec-Fetch-Site", "cross-site")
			w = httptest.NewRecorder()
			h.ServeHTTP(w, r)
			if want := map[bool]int{true: 405, false: 403}[method == "OPTIONS"]; w.Code != want {
				t.Errorf("%s %s from another site: %d, want %d", method, path, w.Code, want)
			}
		}
		r := httptest.NewRequest("HEAD", path, nil)
		r.Host = "localhost"
		w := httptest.NewRecorder()
		h.ServeHTTP(w, r)
		if want := map[bool]int{true: 404, false: 200}[path == "/nowhere"]; w.Code != want {
			t.Errorf("HEAD %s: %d, want %d", path, w.Code, want)
		}
	}
}

func TestSecurityHeaders(t *testing.T) {
	h := serve(t, newFake(), nil).Handler()
	for _, path := range []string{"/", "/shots", "/shot/68", "/nowhere", "/metrics", "/readyz", "/shot/1/file/none"} {
		head := get(t, h, path).Header()
		for name, want := range map[string]string{"X-Content-Type-Options": "nosniff", "Referrer-Policy": "no-referrer",
			"X-Frame-Options": "DENY", "Cross-Origin-Resource-Policy": "same-origin", "Content-Security-Policy": policy} {
			if got := head.Get(name); got != want {
				t.Errorf("GET %s: %s is %q, want %q", path, name, got, want)
			}
		}
	}
	if strings.Contains(policy, "unsafe") || !strings.Contains(policy, "default-src 'none'") || !strings.Contains(policy, "frame-ancestors 'none'") {
		t.Errorf("policy is %q", policy)
	}
}

func TestListenAddresses(t *testing.T) {
	for listen, open := range map[string]bool{"127.0.0.1:0": false, "localhost:0": false, "[::1]:8787": false, "127.0.0.2:0": false,
		"0.0.0.0:8787": true, ":8787": true, "[::]:8787": true, "192.168.1.5:8787": true, "lab-pc:8787": true, "[::ffff:10.0.0.1]:80": true} {
		_, err := New(Options{Listen: listen, Source: newFake(), Registry: prometheus.NewRegistry()})
		if got := errors.Is(err, ErrOpen); got != open {
			t.Errorf("%s: %v, want refused %v", listen, err, open)
		}
	}
	_, err := New(Options{Listen: "8787", Limit: -1})
	for _, want := range []string{"no source", "no registry", `"8787" is not host:port`, "page.limit: -1"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v does not say %q", err, want)
		}
	}
	const text = "page.listen: authentication is not available in this version, use a loopback address"
	if _, err := New(Options{Listen: "0.0.0.0:1", Source: newFake(), Registry: prometheus.NewRegistry()}); err == nil || !strings.Contains(err.Error(), text) {
		t.Errorf("%v does not say %q", err, text)
	}
}
