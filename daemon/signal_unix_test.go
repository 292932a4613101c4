//go:build !windows

package daemon_test

import (
	"os"
	"os/exec"
	"strings"
	"syscall"
	"testing"
	"time"

	"unsheard/pipeline/rig"
	"unsheard/queue"
)

// TestFaultInterruptGroup interrupts the whole process group in the middle of
// work, as Ctrl-C in a terminal and a service manager do. That must not count
// as a failed attempt of any shot.
func TestFaultInterruptGroup(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs the service as a process")
	}
	l := newLab(t, small(), "[work]\nquick = false\nstop = \"0s\"\n")
	l.campaign(t, rig.Campaign{Shots: 12, Seed: 4})
	cmd := exec.Command(build(t), "watch", "--config", l.config)
	cmd.SysProcAttr = &syscall.SysProcAttr{Setpgid: true}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	await(t, 60*time.Second, "the service running", func() bool {
		b, err := os.ReadFile(l.path("state", "unsheard.log"))
		return err == nil && strings.Contains(string(b), `"running"`)
	})
	await(t, 60*time.Second, "a shot running after the first was done", func() bool {
		shots := l.shots(t)
		return count(shots, queue.StateDone) > 0 && count(shots, queue.StateRunning) > 0
	})
	if err := syscall.Kill(-cmd.Process.Pid, syscall.SIGINT); err != nil {
		t.Fatal(err)
	}
	if err := cmd.Wait(); err != nil {
		t.Errorf("the service ended with %v", err)
	}
	r, err := queue.OpenReadOnly(t.Context(), l.path("state", "ledger.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	interrupted := 0
	for _, sh := range l.shots(t) {
		_, attempts, err := r.Shot(t.Context(), sh.ID)
		if err != nil {
			t.Fatal(err)
		}
		for _, a := range attempts {
			switch a.Outcome {
			case queue.OutcomeDone:
			case queue.OutcomeInterrupted:
				interrupted++
			default:
				t.Errorf("shot %s: attempt %d ended as %q: %s", sh.Name, a.Number, a.Outcome, a.Error)
			}
		}
	}
	if interrupted == 0 {
		t.Error("nothing was running when the signal came: the test shows nothing")
	}
	if h := hidden(t, l.path("streak")); len(h) > 0 {
		t.Logf("left for the next start to tidy: %v", h)
	}
}
