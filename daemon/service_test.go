package daemon_test

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"go.uber.org/zap/zaptest"

	"unsheard/config"
	"unsheard/daemon"
	"unsheard/pipeline/rig"
	"unsheard/queue"
)

// program builds the command once for all tests of the package.
var program = sync.OnceValues(func() (string, error) {
	dir, err := os.MkdirTemp("", "unsheard-test-")
	if err != nil {
		return "", err
	}
	exe := filepath.Join(dir, "unsheard")
	if runtime.GOOS == "windows" {
		exe += ".exe"
	}
	out, err := exec.Command("go", "build", "-o", exe, "./cmd/unsheard").CombinedOutput()
	if err != nil {
		return "", fmt.Errorf("build the command: %w: %s", err, out)
	}
	return exe, nil
})

func TestMain(m *testing.M) {
	code := m.Run()
	if exe, err := program(); err == nil {
		os.RemoveAll(filepath.Dir(exe))
	}
	os.Exit(code)
}

func build(t *testing.T) string {
	t.Helper()
	exe, err := program()
	if err != nil {
		t.Fatal(err)
	}
	return exe
}

// small is a station whose shots take a fraction of a second.
func small() rig.Options {
	o := rig.Default()
	o.Station = "bay-a"
	o.H, o.W, o.T = 32, 32, 16
	o.Span = 12
	o.View.SensorW, o.View.SensorH = 60, 58
	return o
}

// lab is a simulated station with its bundle and a service's configuration.
type lab struct {
	dir     string
	station *rig.Station
	config  string
}

func (l *lab) path(parts ...string) string {
	return filepath.Join(append([]string{l.dir}, parts...)...)
}

// newLab takes the series, calibrates with the command and writes a
// configuration with the extra lines.
func newLab(t *testing.T, o rig.Options, extra string) *lab {
	t.Helper()
	st, err := rig.New(o)
	if err != nil {
		t.Fatal(err)
	}
	l := &lab{dir: t.TempDir(), station: st}
	if err := st.WriteSeries(l.path("series")); err != nil {
		t.Fatal(err)
	}
	out, err := exec.Command(build(t), "calibrate", "--series", l.path("series", "series.toml"), "--out", l.path("bundles", "first")).CombinedOutput()
	if err != nil {
		t.Fatalf("calibrate: %v\n%s", err, out)
	}
	t.Logf("%s", out)
	for _, d := range []string{"streak", "reference"} {
		if err := os.Mkdir(l.path(d), 0o755); err != nil {
			t.Fatal(err)
		}
	}
	l.config = l.path("unsheard.toml")
	text := `
[campaign]
name = "test"
[[station]]
name = "bay-a"
bundle = "bundles"
[station.streak]
folder = "streak"
stamp = "S_%Y%m%dT%H%M%S.%f.tif"
quiet = "100ms"
rescan = "300ms"
[station.reference]
folder = "reference"
stamp = "R_%Y%m%dT%H%M%S.%f.tif"
quiet = "100ms"
rescan = "300ms"
[station.pair]
grace = "3s"
[page]
listen = "127.0.0.1:0"
[disk]
keep_free = "0B"
` + extra
	if err := os.WriteFile(l.config, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	return l
}

// campaign writes shots as fast as possible, a second apart by their stamps.
func (l *lab) campaign(t *testing.T, c rig.Campaign) []rig.Record {
	t.Helper()
	c.Streak, c.Reference = l.path("streak"), l.path("reference")
	if c.Start.IsZero() {
		c.Start = time.Date(2026, 3, 14, 9, 0, 0, 0, time.UTC)
	}
	var out []rig.Record
	if err := l.station.WriteCampaign(t.Context(), c, func(r rig.Record) { out = append(out, r) }); err != nil {
		t.Fatal(err)
	}
	return out
}

// serve runs the service in this process until the test ends or stop is
// called, and returns the page's address.
func (l *lab) serve(t *testing.T) (page string, stop func()) {
	t.Helper()
	c, err := config.Load(l.config)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	started := make(chan string, 1)
	d, err := daemon.New(ctx, daemon.Options{Config: c, Registry: prometheus.NewRegistry(), Executable: build(t),
		Logger: zaptest.NewLogger(t), Started: func(p string) { started <- p }})
	if err != nil {
		cancel()
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	stop = sync.OnceFunc(func() {
		cancel()
		select {
		case err := <-ended:
			if err != nil {
				t.Errorf("Run = %v", err)
			}
		case <-time.After(60 * time.Second):
			t.Error("the service did not stop within a minute")
		}
	})
	t.Cleanup(stop)
	select {
	case page = <-started:
	case err := <-ended:
		t.Fatalf("Run = %v before it had started", err)
	}
	return page, stop
}

// shots lists the ledger with the command, as a user would.
func (l *lab) shots(t *testing.T, args ...string) []queue.Shot {
	t.Helper()
	out, err := exec.Command(build(t), append([]string{"shots", "--config", l.config, "--json", "--limit", "100000"}, args...)...).Output()
	if err != nil {
		var e *exec.ExitError
		if errors.As(err, &e) {
			t.Fatalf("shots: %v: %s", err, e.Stderr)
		}
		t.Fatal(err)
	}
	var shots []queue.Shot
	if err := json.Unmarshal(out, &shots); err != nil {
		t.Fatalf("shots --json: %v\n%s", err, out)
	}
	return shots
}

// await looks until ok says so.
func await(t *testing.T, limit time.Duration, what string, ok func() bool) {
	t.Helper()
	for end := time.Now().Add(limit); !ok(); time.Sleep(100 * time.Millisecond) {
		if time.Now().After(end) {
			t.Fatalf("not within %v: %s", limit, what)
		}
	}
}

func get(t *testing.T, url string) (int, string) {
	t.Helper()
	r, err := http.Get(url)
	if err != nil {
		t.Fatal(err)
	}
	defer r.Body.Close()
	b, err := io.ReadAll(r.Body)
	if err != nil {
		t.Fatal(err)
	}
	return r.StatusCode, string(b)
}

// python runs a script of testdata with Debian's Python.
func python(t *testing.T, script string, args ...string) string {
	t.Helper()
	out, err := exec.Command("/usr/bin/python3", append([]string{filepath.Join("testdata", script)}, args...)...).CombinedOutput()
	if err != nil {
		t.Fatalf("%s (needs python3-tifffile, python3-h5py, python3-silx, python3-numpy): %v\n%s", script, err, out)
	}
	return string(out)
}

func count(shots []queue.Shot, s queue.State) (n int) {
	for _, sh := range shots {
		if sh.State == s {
			n++
		}
	}
	return n
}

// hidden lists temporary entries left in a folder.
func hidden(t *testing.T, dir string) (out []string) {
	t.Helper()
	list, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range list {
		if strings.HasPrefix(e.Name(), ".") {
			out = append(out, e.Name())
		}
	}
	return out
}
