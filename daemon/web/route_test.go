package web

import (
	"encoding/json"
	"errors"
	"net/http"
	"net/http/httptest"
	"net/url"
	"os/exec"
	"slices"
	"strings"
	"testing"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
)

func TestRoutes(t *testing.T) {
	f := newFake()
	h := serve(t, f, nil).Handler()
	for _, c := range []struct {
		path string
		code int
		want []string
	}{
		{"/", 200, []string{"keeping up", "3 waiting, oldest 4 s, 1 running", "S_20310304T140211.250", "12.35",
			"/shot/70/file/contact.png?v=", "quarantined", "Set the camera back", "camera2", "missing", "no laser", "no interlock", "no safety device", "IEC 60825-1"}},
		{"/shots", 200, []string{"S_20310304T134811.731", "lone", "arms disagree by 14 %", `scope="col"`}},
		{"/shots?verdict=unusable", 200, []string{"saturated", `<option value="unusable" selected>`}},
		{"/shots?text=no-such-name", 200, []string{"No shot passes this filter."}},
		{"/shots?station=bay-of-old", 200, []string{"<option selected>bay-of-old</option>"}},
		{"/shots?state=asleep", 400, []string{"There is no state &#34;asleep&#34;"}},
		{"/shots?verdict=fine", 400, []string{"There is no verdict"}},
		{"/shots?after=elsewhere", 400, []string{"start from the newest shot"}},
		{"/shots?text=" + strings.Repeat("x", 201), 400, []string{"at most 200 bytes"}},
		{"/shots?text=%ff", 400, []string{"no text"}},
		{"/shot/68", 200, []string{"The arms disagree by 14 %.", "recalibrate", "the file ends after 1203", "14.35", "± 0.21", "—",
			"/shot/68/file/cube.nxs", "48.1 MB", "1.82 ms", "bay-a-20310304", "41 s, on lab-pc"}},
		{"/shot/69", 404, []string{"no shot with this number"}},
		{"/shot/0", 404, nil}, {"/shot/-3", 404, nil}, {"/shot/abc", 404, nil},
		{"/shot/99999999999999999999", 404, nil},
		{"/shot/68/file/metrics.json", 200, []string{"{}"}},
		{"/shot/68/file/movie.png", 404, []string{"has no such result file"}},
		{"/shot/68/file/secret.txt", 404, []string{"no such result file"}},
		{"/shot/68/file/..%2fcube.nxs", 404, nil}, {"/shot/68/file/%2e%2e", 404, nil}, {"/shot/68/file/Contact.PNG", 404, nil},
		{"/livez", 200, []string{"alive"}},
		{"/readyz", 200, []string{"ready"}},
		{"/readyz?verbose", 200, []string{"ok    queue open"}},
		{"/version", 200, []string{`"version": "0.1-test"`}},
		{"/metrics", 200, []string{"unsheard_page_requests_total", "unsheard_page_streams 0"}},
		{"/nowhere", 404, []string{"no such page"}},
		{"/static/app.css", 404, nil}, // only under its hashed name
	} {
		w := get(t, h, c.path)
		if w.Code != c.code {
			t.Errorf("GET %s: %d, want %d", c.path, w.Code, c.code)
		}
		for _, want := range c.want {
			if !strings.Contains(w.Body.String(), want) {
				t.Errorf("GET %s: no %q in the answer", c.path, want)
			}
		}
	}
}

func TestSourceFault(t *testing.T) {
	f := newFake()
	f.err = errors.New("disk on fire at row 7")
	h := serve(t, f, nil).Handler()
	for _, path := range []string{"/shots", "/shot/68", "/shot/68/file/cube.nxs"} {
		w := get(t, h, path)
		if w.Code != http.StatusServiceUnavailable {
			t.Errorf("GET %s: %d, want 503", path, w.Code)
		}
		if strings.Contains(w.Body.String(), "row 7") {
			t.Errorf("GET %s shows the inner error; it belongs into the log", path)
		}
	}
}

func TestProbes(t *testing.T) {
	f := newFake()
	h := serve(t, f, nil).Handler()
	f.checks = append(f.checks, Check{"bay-b streak folder", false, "missing\nok    forged line"})
	w := get(t, h, "/readyz")
	if got, want := w.Body.String(), "not ready\nbay-b streak folder: missing ok forged line\n"; w.Code != 503 || got != want {
		t.Errorf("readyz: %d %q, want 503 %q", w.Code, got, want)
	}
	w = get(t, h, "/readyz?verbose")
	want := "not ready\nok    queue open\nok    bay-a streak folder\nFAIL  bay-b streak folder: missing ok forged line\n"
	if got := w.Body.String(); w.Code != 503 || got != want {
		t.Errorf("readyz?verbose: %d %q, want 503 %q", w.Code, got, want)
	}
	f.checks = nil
	if w := get(t, h, "/readyz"); w.Code != 503 {
		t.Errorf("readyz without any check: %d, want 503", w.Code)
	}
	f.dead = errors.New("last turn 40 s ago")
	if w := get(t, h, "/livez"); w.Code != 503 || !strings.Contains(w.Body.String(), "40 s") {
		t.Errorf("livez of a stopped loop: %d %q", w.Code, w.Body)
	}
}

func TestPaging(t *testing.T) {
	f := newFake()
	h := serve(t, f, func(o *Options) { o.Limit = 4 }).Handler()
	path := "/shots?station=bay-a"
	var seen []string
	for range 5 {
		body := get(t, h, path).Body.String()
		for _, s := range f.list {
			if strings.Contains(body, ">"+s.Name+"<") {
				seen = append(seen, s.Name)
			}
		}
		i := strings.Index(body, `" rel="next">`)
		if i < 0 {
			break
		}
		path = strings.ReplaceAll(body[strings.LastIndex(body[:i], `"`)+1:i], "&amp;", "&")
		if !strings.Contains(path, "station=bay-a") {
			t.Fatalf("the next page %s has lost the filter", path)
		}
	}
	var want []string
	for _, s := range f.list {
		if s.Station == "bay-a" {
			want = append(want, s.Name)
		}
	}
	if !slices.Equal(seen, want) {
		t.Errorf("pages show %v, want %v", seen, want)
	}
}

// TestHostileTexts puts markup into every text that comes from file names,
// configuration or errors.
func TestHostileTexts(t *testing.T) {
	const evil = `"><script>alert(1)</script><img src=x onerror=alert(1)>'` + "`{{.}}"
	f := newFake()
	q := []Quantity{{Name: evil, Value: 1, Sigma: .1, Unit: evil, Method: evil}}
	s := Shot{ID: 68, Name: evil, Station: evil, State: evil, Pass: evil, Verdict: evil, Reason: evil, Key: q, Picture: true}
	f.list = []Shot{s, s}
	f.detail[68] = ShotDetail{Shot: s, Reasons: []Reason{{evil, evil, evil}}, Quantities: q, Bundle: evil, Folder: evil,
		Attempts: []Attempt{{1, evil, evil, start, 0, evil}}, Frames: []Frame{{evil, evil, start, 1}},
		Files: []Info{{evil, 1, start}, {"cube.nxs", 1, start}}}
	f.snap = Snapshot{Campaign: evil, Time: start, Fault: evil, Queue: Queue{Stopped: evil}, Recent: f.list,
		Attention: []Attention{{68, evil, evil, evil, start, evil, evil}},
		Stations:  []Station{{evil, []Folder{{evil, evil, evil, start, evil, start}}, evil, evil}}}
	h := serve(t, f, func(o *Options) { o.Version = evil }).Handler()
	for _, path := range []string{"/", "/shots", "/shots?text=%22%3E%3Cscript%3Ealert(1)%3C/script%3E", "/shots?state=%3Cscript%3E",
		"/shots?station=%22onfocus=alert(1)%20x=%22", "/shot/68", "/shot/68/file/%3Cscript%3E", "/%3Cscript%3Ealert(1)"} {
		body := get(t, h, path).Body.String()
		for _, bad := range []string{"<script>", "<img src=x", "alert(1)</", `""onfocus`, `" onfocus`, `"onfocus`} {
			if strings.Contains(body, bad) {
				t.Errorf("GET %s: %q came through unescaped", path, bad)
			}
		}
		if strings.Contains(body, evil) {
			t.Errorf("GET %s shows a hostile text as it is", path)
		}
	}
	if body := get(t, h, "/shot/68").Body.String(); strings.Contains(body, "/file/%22") {
		t.Error("a file that is not on the list is offered for download")
	}
}

func TestFileHeaders(t *testing.T) {
	h := serve(t, newFake(), nil).Handler()
	for name, want := range map[string][2]string{
		"cube.nxs":    {"application/x-hdf5", `attachment; filename="cube-68.nxs"`},
		"light.svg":   {"image/svg+xml", ""},
		"contact.png": {"image/png", ""},
	} {
		w := get(t, h, "/shot/68/file/"+name)
		got := [2]string{w.Header().Get("Content-Type"), w.Header().Get("Content-Disposition")}
		if w.Code != 200 || got != want {
			t.Errorf("%s: %d %q, want %q", name, w.Code, got, want)
		}
		if csp := w.Header().Get("Content-Security-Policy"); !strings.Contains(csp, "sandbox") || strings.Contains(csp, "script-src") {
			t.Errorf("%s: policy %q, want a sandbox without scripts", name, csp)
		}
	}
	r := httptest.NewRequest("GET", "/shot/68/file/cube.nxs", nil)
	r.Host = "localhost"
	r.Header.Set("Range", "bytes=1-3")
	w := httptest.NewRecorder()
	h.ServeHTTP(w, r)
	if w.Code != http.StatusPartialContent || w.Body.String() != "HDF" {
		t.Errorf("range: %d %q, want 206 HDF", w.Code, w.Body)
	}
	r.Header.Del("Range")
	r.Header.Set("If-None-Match", w.Header().Get("ETag"))
	w = httptest.NewRecorder()
	h.ServeHTTP(w, r)
	if w.Code != http.StatusNotModified {
		t.Errorf("same file again: %d, want 304", w.Code)
	}
}

func TestDownloadsAreBounded(t *testing.T) {
	s := serve(t, newFake(), func(o *Options) { o.Downloads = 1 })
	s.loads <- struct{}{} // one is running
	if w := get(t, s.Handler(), "/shot/68/file/cube.nxs"); w.Code != 503 || w.Header().Get("Retry-After") == "" {
		t.Errorf("second download: %d, want 503 with Retry-After", w.Code)
	}
	<-s.loads
	for range 3 {
		if w := get(t, s.Handler(), "/shot/68/file/cube.nxs"); w.Code != 200 {
			t.Errorf("download after the other ended: %d, want 200", w.Code)
		}
	}
}

func TestStaticNames(t *testing.T) {
	s := serve(t, newFake(), nil)
	body := get(t, s.Handler(), "/").Body.String()
	for _, name := range []string{"app.css", "app.js", "icon.svg"} {
		u := s.files.URL[name]
		if !strings.Contains(body, `"`+u+`"`) {
			t.Errorf("the page does not name %s", u)
		}
		w := get(t, s.Handler(), u)
		if w.Code != 200 || !strings.Contains(w.Header().Get("Cache-Control"), "immutable") {
			t.Errorf("%s: %d, Cache-Control %q", u, w.Code, w.Header().Get("Cache-Control"))
		}
	}
	for _, bad := range []string{" style=", "<style", "javascript:", " onclick", "http://", "https://"} {
		if strings.Contains(body, bad) {
			t.Errorf("the page contains %q, which the policy forbids or which is foreign", bad)
		}
	}
}

func TestVersion(t *testing.T) {
	var got map[string]string
	if err := json.Unmarshal(get(t, serve(t, newFake(), nil).Handler(), "/version").Body.Bytes(), &got); err != nil {
		t.Fatal(err)
	}
	if got["name"] != "unsheard" || got["version"] != "0.1-test" || !strings.HasPrefix(got["go"], "go1") {
		t.Errorf("got %v", got)
	}
}

// FuzzAddress puts any text into the address: the filter comes back from the
// address the page makes of it, and nothing reaches the page unescaped.
func FuzzAddress(f *testing.F) {
	f.Add("bay-a", "held", "good", "S_2031", "p4")
	f.Add("<script>", "", "unusable", `"onfocus=alert(1)`, "\x00")
	s, err := New(Options{Source: newFake(), Registry: prometheus.NewRegistry()})
	if err != nil {
		f.Fatal(err)
	}
	var plain string // the pages this server shows without any filter
	for _, u := range []string{"/shots", "/shots?after=p0&text=none", "/shots?state=x", "/shots?verdict=x", "/shots?after=x"} {
		r := httptest.NewRequest("GET", u, nil)
		r.Host = "localhost"
		w := httptest.NewRecorder()
		s.Handler().ServeHTTP(w, r)
		plain += w.Body.String()
	}
	f.Fuzz(func(t *testing.T, station, state, verdict, text, after string) {
		in := Filter{Station: station, State: state, Verdict: verdict, Text: strings.TrimSpace(text), After: after}
		u := shotsURL(in, after)
		q, err := url.Parse(u)
		if err != nil {
			t.Fatalf("%q: %v", u, err)
		}
		if got, fault := readFilter(q.Query()); fault == "" && got != in {
			t.Errorf("%q comes back as %+v, want %+v", u, got, in)
		}
		w := get(t, s.Handler(), u)
		if w.Code != 200 && w.Code != 400 {
			t.Errorf("GET %q: %d", u, w.Code)
		}
		for _, v := range []string{station, state, verdict, text} {
			// A text that is markup of the page itself proves nothing.
			if strings.ContainsRune(v, '<') && !strings.Contains(plain, v) && strings.Contains(w.Body.String(), v) {
				t.Errorf("GET %q shows %q unescaped", u, v)
			}
		}
	})
}

// TestMetricsLint has the text read by promtool (Debian package prometheus):
// form, names, units, help texts.
func TestMetricsLint(t *testing.T) {
	tool, err := exec.LookPath("promtool")
	if err != nil {
		t.Fatal("promtool is missing: apt-get install prometheus")
	}
	reg := prometheus.NewRegistry()
	reg.MustRegister(collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}))
	h := serve(t, newFake(), func(o *Options) { o.Registry = reg }).Handler()
	get(t, h, "/")
	get(t, h, "/nowhere")
	text := get(t, h, "/metrics").Body.String()
	check := func(text string) (string, error) {
		c := exec.Command(tool, "check", "metrics")
		c.Stdin = strings.NewReader(text)
		out, err := c.CombinedOutput()
		return string(out), err
	}
	if out, err := check(text); err != nil || out != "" {
		t.Errorf("promtool: %v\n%s", err, out)
	}
	for _, want := range []string{`unsheard_page_requests_total{class="2xx"} 1`, `unsheard_page_requests_total{class="4xx"} 1`} {
		if !strings.Contains(text, want) {
			t.Errorf("no %s in the metrics", want)
		}
	}
	// The check itself must be able to fail.
	if out, err := check("# TYPE unsheard_bad counter\nunsheard_bad 1\n"); err == nil && out == "" {
		t.Error("promtool finds nothing wrong with a counter without help and without _total")
	}
}

// BenchmarkNow renders the first page from a snapshot at hand.
func BenchmarkNow(b *testing.B) {
	s, err := New(Options{Source: newFake(), Registry: prometheus.NewRegistry()})
	if err != nil {
		b.Fatal(err)
	}
	r := httptest.NewRequest("GET", "/", nil)
	r.Host = "localhost"
	b.ReportAllocs()
	for b.Loop() {
		w := httptest.NewRecorder()
		s.Handler().ServeHTTP(w, r)
		if w.Code != http.StatusOK {
			b.Fatal(w.Code)
		}
	}
}
