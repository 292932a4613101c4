package daemon_test

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"unsheard/pipeline/rig"
	"unsheard/queue"
)

// TestFaultBadFiles drops what laboratories drop: each file ends in a clear state
// with a reason in the ledger and on the page, and the service goes on.
func TestFaultBadFiles(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs the whole service through its retries")
	}
	l := newLab(t, small(), "[work]\nattempts = 2\n")
	recs := l.campaign(t, rig.Campaign{Shots: 7, Seed: 3})
	bad := map[string]struct {
		spoil func(good []byte) []byte
		why   string
	}{
		recs[0].Streak: {func(g []byte) []byte { return g[:len(g)*2/3] }, "complete"},
		recs[1].Streak: {func([]byte) []byte { return bomb() }, "30000"},
		recs[2].Streak: {func([]byte) []byte { return square(t, 20) }, "20×20"},
		recs[3].Streak: {func([]byte) []byte { return []byte("shot 4 was a good one\n") }, "not a readable frame"},
		recs[4].Streak: {func([]byte) []byte { return nil }, "empty"},
	}
	var good []byte // the frame that becomes a text file
	for name, b := range bad {
		p := l.path("streak", name)
		g, err := os.ReadFile(p)
		if err != nil {
			t.Fatal(err)
		}
		if name == recs[3].Streak {
			good = g
		}
		if err := os.WriteFile(p, b.spoil(g), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	page, _ := l.serve(t)
	var shots []queue.Shot
	// The empty file counts as whole after a minute only.
	await(t, 150*time.Second, "five shots given up and two done", func() bool {
		shots = l.shots(t)
		return count(shots, queue.StateQuarantined) == 5 && count(shots, queue.StateDone) == 2
	})
	for _, sh := range shots {
		b, ok := bad[sh.StreakPath]
		if !ok {
			continue
		}
		if !strings.Contains(sh.Reason, b.why) || !strings.Contains(sh.Reason, filepath.Base(sh.StreakPath)) {
			t.Errorf("%s: reason %q names neither %q nor the file", sh.Name, sh.Reason, b.why)
		}
		_, body := get(t, fmt.Sprintf("%sshot/%d", page, sh.ID))
		if !strings.Contains(body, b.why) {
			t.Errorf("%s: its page does not say %q", sh.Name, b.why)
		}
	}
	for _, sh := range shots {
		if sh.State == queue.StateDone && (sh.ShownPass != queue.Full || readMetrics(t, sh.ResultDir).Pass != "full") {
			t.Errorf("%s is done and shows the %s pass", sh.Name, sh.ShownPass)
		}
	}
	// A file that is written anew is taken up again.
	if err := os.WriteFile(l.path("streak", recs[3].Streak), good, 0o644); err != nil {
		t.Fatal(err)
	}
	await(t, 60*time.Second, "the shot of the mended file done", func() bool {
		for _, sh := range l.shots(t) {
			if sh.StreakPath == recs[3].Streak {
				return sh.State == queue.StateDone && sh.Verdict != ""
			}
		}
		return false
	})
	if code, body := get(t, page+"readyz?verbose"); code != 200 {
		t.Errorf("readyz = %d after bad files:\n%s", code, body)
	}
}

// bomb is a TIFF of about 130 bytes that claims 30000×30000 pixels of 16 bit.
func bomb() []byte {
	entries := [][3]uint32{{256, 4, 30000}, {257, 4, 30000}, {258, 3, 16}, {259, 3, 1}, {262, 3, 1}, {273, 4, 122}, {277, 3, 1}, {278, 4, 30000}, {279, 4, 8}}
	b := []byte{'I', 'I', 42, 0, 8, 0, 0, 0}
	b = binary.LittleEndian.AppendUint16(b, uint16(len(entries)))
	for _, e := range entries {
		b = binary.LittleEndian.AppendUint16(b, uint16(e[0]))
		b = binary.LittleEndian.AppendUint16(b, uint16(e[1]))
		b = binary.LittleEndian.AppendUint32(b, 1)
		b = binary.LittleEndian.AppendUint32(b, e[2])
	}
	b = binary.LittleEndian.AppendUint32(b, 0)
	return append(b, make([]byte, 8)...)
}

// square is a readable frame of a wrong size.
func square(t *testing.T, n int) []byte {
	t.Helper()
	p := filepath.Join(t.TempDir(), "square.tif")
	if err := rig.Save(rig.Image{W: n, H: n, Pix: make([]uint16, n*n)}, p); err != nil {
		t.Fatal(err)
	}
	b, err := os.ReadFile(p)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// TestFaultKill kills the service without warning at 20 random moments while 200
// shots are queued. At the end every shot has exactly one whole result, no
// frame has changed and nothing temporary is left.
func TestFaultKill(t *testing.T) {
	if testing.Short() {
		t.Skip("long: 200 shots and 20 kills")
	}
	const shots, kills = 200, 20
	o := small()
	o.H, o.W, o.T = 24, 24, 8
	o.Span = 6
	o.View.SensorW, o.View.SensorH = 50, 48
	l := newLab(t, o, "[work]\nquick = false\nattempts = 10\n")
	l.campaign(t, rig.Campaign{Shots: shots, Seed: 9})
	before := sums(t, l.path("streak"), l.path("reference"))
	seed := uint64(20260314)
	rng := rand.New(rand.NewPCG(seed, 1))
	t.Logf("seed %d", seed)
	done := func() int {
		if _, err := os.Stat(l.path("state", "ledger.db")); err != nil {
			return 0
		}
		return count(l.shots(t), queue.StateDone)
	}
	for k := range kills {
		cmd := start(t, l)
		// From before the ledger is open to well within the work.
		time.Sleep(time.Duration(rng.Float64() * float64(2500*time.Millisecond)))
		if err := cmd.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		_ = cmd.Wait()
		t.Logf("kill %d: %d of %d done", k+1, done(), shots)
	}
	cmd := start(t, l)
	await(t, 300*time.Second, "all shots done", func() bool { return done() == shots })
	if err := cmd.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	if err := cmd.Wait(); err != nil {
		t.Errorf("the service ended with %v after an interrupt", err)
	}
	all := l.shots(t)
	if len(all) != shots {
		t.Errorf("%d shots in the ledger, want %d", len(all), shots)
	}
	folders, _ := filepath.Glob(l.path("streak", "*.shot"))
	if len(folders) != shots {
		t.Errorf("%d result folders, want %d", len(folders), shots)
	}
	for _, f := range folders {
		for _, name := range []string{"cube.nxs", "metrics.json", "contact.png", "light.svg"} {
			if st, err := os.Stat(filepath.Join(f, name)); err != nil || st.Size() == 0 {
				t.Errorf("%s: %s is missing or empty", f, name)
			}
		}
		if _, err := os.Stat(filepath.Join(f, "versions")); err == nil {
			t.Errorf("%s: has a second version", f)
		}
	}
	if h := hidden(t, l.path("streak")); len(h) > 0 {
		t.Errorf("left behind: %v", h)
	}
	python(t, "whole.py", folders...)
	for p, s := range sums(t, l.path("streak"), l.path("reference")) {
		if before[p] != s {
			t.Errorf("raw frame %s was changed or added", p)
		}
	}
}

// start runs the service as its own process.
func start(t *testing.T, l *lab) *exec.Cmd {
	t.Helper()
	cmd := exec.Command(build(t), "watch", "--config", l.config)
	log, err := os.OpenFile(l.path("terminal.log"), os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o644)
	if err != nil {
		t.Fatal(err)
	}
	defer log.Close()
	cmd.Stdout, cmd.Stderr = log, log
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = cmd.Process.Kill() })
	return cmd
}

// sums hashes the frame files of folders.
func sums(t *testing.T, dirs ...string) map[string][32]byte {
	t.Helper()
	out := map[string][32]byte{}
	for _, d := range dirs {
		files, err := filepath.Glob(filepath.Join(d, "*.tif"))
		if err != nil {
			t.Fatal(err)
		}
		for _, f := range files {
			b, err := os.ReadFile(f)
			if err != nil {
				t.Fatal(err)
			}
			out[f] = sha256.Sum256(b)
		}
	}
	return out
}
