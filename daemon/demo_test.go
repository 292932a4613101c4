package daemon_test

import (
	"bufio"
	"encoding/json"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"unsheard/queue"
)

// TestEndToEndDemo runs the demo as a user does: it calibrates, films with
// faults, shows its page, and an interrupt ends it in order.
func TestEndToEndDemo(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs the demo")
	}
	dir := filepath.Join(t.TempDir(), "demo")
	cmd := exec.Command(build(t), "demo", "--dir", dir, "--listen", "127.0.0.1:0", "--shots", "12", "--every", "500ms", "--faults", "0.4", "--seed", "5")
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	var complaints strings.Builder
	cmd.Stderr = &complaints
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = cmd.Process.Kill() })
	lines := make(chan string, 100)
	go func() {
		defer close(lines)
		for s := bufio.NewScanner(out); s.Scan(); {
			lines <- s.Text()
		}
	}()
	page := ""
	for l := range lines {
		if f := strings.Fields(l); len(f) == 2 && f[0] == "page" {
			page = f[1]
			break
		}
	}
	if page == "" {
		t.Fatalf("the demo printed no page; it says %s", complaints.String())
	}
	l := &lab{dir: dir, config: filepath.Join(dir, "unsheard.toml")}
	settled := func() bool {
		shots := l.shots(t)
		open := count(shots, queue.StateWaiting) + count(shots, queue.StatePaired) + count(shots, queue.StateRunning) + count(shots, queue.StateFailed)
		return len(shots) >= 12 && open == 0
	}
	await(t, 200*time.Second, "every shot of the demo settled", settled)
	for path, want := range map[string]string{"": "basin", "shots": "S_", "metrics": "unsheard_shots", "livez": "", "version": ""} {
		if code, body := get(t, page+path); code != 200 || !strings.Contains(body, want) {
			t.Errorf("GET /%s = %d, without %q", path, code, want)
		}
	}
	if code, body := get(t, page+"readyz?verbose"); code != 200 {
		t.Errorf("readyz = %d:\n%s", code, body)
	}
	checkTruth(t, l)
	if err := cmd.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	last := ""
	for s := range lines {
		last = s
	}
	if err := cmd.Wait(); err != nil {
		t.Errorf("the demo ended with %v: %s", err, complaints.String())
	}
	if !strings.Contains(last, dir) {
		t.Errorf("its last line is %q, want where everything is kept", last)
	}
}

// checkTruth compares the total light of clean shots with what was filmed, and
// the fate of faulty ones with their fault.
func checkTruth(t *testing.T, l *lab) {
	t.Helper()
	by := map[string]queue.Shot{}
	for _, s := range l.shots(t) {
		by[s.StreakPath] = s
	}
	files, err := filepath.Glob(l.path("truth", "shot_*.json"))
	if err != nil || len(files) != 12 {
		t.Fatalf("%d truth files, %v", len(files), err)
	}
	for _, f := range files {
		var r struct {
			Scene, Fault, Streak string
			Summary              struct {
				Total float64 `json:"total_pe"`
			}
		}
		b, err := os.ReadFile(f)
		if err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(b, &r); err != nil {
			t.Fatal(err)
		}
		s := by[r.Streak]
		t.Logf("%s %s %q: %s %s %s", filepath.Base(f), r.Scene, r.Fault, s.State, s.Verdict, s.Reason)
		switch r.Fault {
		case "", "late":
			m := readMetrics(t, s.ResultDir)
			if got := m.Quantities["total_light"].Value / r.Summary.Total; !(got > 0.95 && got < 1.05) {
				t.Errorf("%s (%s): total light %.3f of the truth, want within 5 %%", s.Name, r.Scene, got)
			}
		case "no-reference":
			if s.State != queue.StateLone {
				t.Errorf("%s: %s, want lone without a reference frame", s.Name, s.State)
			}
		case "truncated", "shape", "text":
			if s.State != queue.StateQuarantined || s.Reason == "" {
				t.Errorf("%s (%s): %s %q, want quarantined with a reason", s.Name, r.Fault, s.State, s.Reason)
			}
		}
	}
}

// metrics is what the tests read of metrics.json.
type metrics struct {
	Pass       string
	Quantities map[string]struct{ Value float64 }
	Verdict    struct{ Grade string }
}

func readMetrics(t *testing.T, dir string) (m metrics) {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(dir, "metrics.json"))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, &m); err != nil {
		t.Fatal(err)
	}
	return m
}
