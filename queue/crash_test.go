package queue_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"unsheard/queue"
)

// The crash tests run this test binary again as a child that enters shots and
// works them, and is killed.

const childVar = "UNSHEARD_QUEUE_TEST_CHILD"

// crashSeed makes the moments of the kills repeatable, as far as the machine is.
const crashSeed = 20260309

// beChild is the child's whole life: with the variable set it never returns.
func beChild() {
	kind, path, ok := strings.Cut(os.Getenv(childVar), " ")
	if !ok {
		return
	}
	if err := childLife(kind, path); err != nil {
		fmt.Fprintln(os.Stderr, "child:", err)
		os.Exit(1)
	}
	os.Exit(0)
}

const (
	crashShots  = 300 // entered by the children, a few at a time
	poisonShots = 12
	poisonName  = "s5"
)

func childLife(kind, path string) error {
	ctx := context.Background()
	// The kills must not use the attempts up: that is the poison test's subject.
	o := queue.Options{Path: path, MaxAttempts: 1000, Passes: []queue.Pass{queue.Quick, queue.Full}}
	n := crashShots
	if kind == "poison" {
		o.MaxAttempts, o.Passes, n = 3, []queue.Pass{queue.Full}, poisonShots
	}
	s, err := queue.Open(ctx, o)
	if err != nil {
		return err
	}
	fmt.Println("open")
	errs := make(chan error, 2)
	go func() { errs <- enter(ctx, s, n) }()
	go func() {
		errs <- s.Run(ctx, &noter{dir: filepath.Dir(path), poison: kind == "poison"}, queue.RunOptions{Slots: 3, QuickSlots: 2})
	}()
	for {
		select {
		case err := <-errs:
			if err != nil {
				return err
			}
		case <-time.After(5 * time.Millisecond):
			done, err := finished(ctx, &s.Reader, n)
			if err != nil {
				return err
			}
			if done {
				return nil // without a Close: that, too, the next Open must bear
			}
		}
	}
}

// enter adds frames and pairs as the service does: what is known already stays.
func enter(ctx context.Context, s *queue.Store, n int) error {
	const step = 7
	for i := 0; i < n; i += step {
		var frames []queue.Frame
		for k := i; k < min(i+step, n); k++ {
			for _, arm := range []queue.Arm{queue.Streak, queue.Reference} {
				frames = append(frames, queue.Frame{Station: "bay", Arm: arm, Path: fmt.Sprintf("s%d.tif", k), Size: 1, ModTime: time.Unix(int64(k), 0)})
			}
		}
		added, err := s.AddFrames(ctx, frames)
		if err != nil {
			return err
		}
		var d queue.Decision
		for k := 0; k < len(added); k += 2 {
			d.Pairs = append(d.Pairs, queue.Pair{Streak: added[k].ID, Reference: added[k+1].ID})
		}
		rep, err := s.Commit(ctx, d, "b1")
		if err != nil {
			return err
		}
		if len(rep.Refused) > 0 {
			return fmt.Errorf("refused: %v", rep.Refused)
		}
	}
	return nil
}

func finished(ctx context.Context, r *queue.Reader, n int) (bool, error) {
	counts, err := r.Counts(ctx, "")
	if err != nil {
		return false, err
	}
	depth, err := r.QueueDepth(ctx)
	if err != nil {
		return false, err
	}
	return counts[queue.StateDone]+counts[queue.StateQuarantined] == n && depth[queue.Quick].Jobs+depth[queue.Quick].Running == 0, nil
}

// noter does trivial work and notes each start in a file; the poisoned shot
// kills the process.
type noter struct {
	dir    string
	poison bool
	mu     sync.Mutex
}

func (n *noter) Do(_ context.Context, t queue.Task) (queue.Outcome, error) {
	n.mu.Lock()
	err := note(filepath.Join(n.dir, "starts"), fmt.Sprintf("%s %s %v %d\n", t.Name, t.Pass, t.Suspect, os.Getpid()))
	n.mu.Unlock()
	if err != nil {
		return queue.Outcome{}, err
	}
	if n.poison && t.Name == poisonName {
		kill(os.Getpid())
	}
	time.Sleep(time.Duration(t.ShotID%5) * time.Millisecond)
	return queue.Outcome{Verdict: "good", Summary: []byte(strconv.FormatInt(t.AttemptID, 10))}, nil
}

func note(path, line string) error {
	f, err := os.OpenFile(path, os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o644)
	if err != nil {
		return err
	}
	_, err = f.WriteString(line)
	return errors.Join(err, f.Close())
}

func kill(pid int) {
	p, err := os.FindProcess(pid)
	if err == nil {
		err = p.Signal(syscall.SIGKILL)
	}
	if err != nil {
		panic(err)
	}
	select {} // until the signal arrives
}

// child starts a child and returns when it has the ledger open.
func child(t *testing.T, kind, path string) (cmd *exec.Cmd, stderr *bytes.Buffer) {
	t.Helper()
	cmd = exec.Command(os.Args[0])
	cmd.Env = append(os.Environ(), childVar+"="+kind+" "+path)
	stderr = &bytes.Buffer{}
	cmd.Stderr = stderr
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	if _, err := out.Read(make([]byte, 16)); err != nil {
		t.Fatalf("child did not open the ledger: %v; %s", errors.Join(err, cmd.Wait()), stderr)
	}
	return cmd, stderr
}

func TestKilledAnywhere(t *testing.T) {
	if testing.Short() {
		t.Skip("it kills twenty processes")
	}
	path := filepath.Join(t.TempDir(), "ledger.db")
	rnd := rand.New(rand.NewPCG(crashSeed, 1))
	t.Logf("seed %d", crashSeed)
	const kills = 20
	killed := 0
	for killed < kills {
		cmd, stderr := child(t, "work", path)
		time.Sleep(time.Duration(rnd.IntN(250)) * time.Millisecond)
		if err := cmd.Process.Kill(); err != nil && !errors.Is(err, os.ErrProcessDone) {
			t.Fatal(err)
		}
		if err := cmd.Wait(); err == nil {
			t.Logf("the work was done after %d kills", killed)
			break
		} else if strings.Contains(stderr.String(), "child:") {
			t.Fatalf("child failed by itself: %s", stderr)
		}
		killed++
	}
	if killed < kills/2 {
		t.Errorf("only %d kills hit work: there is too little of it for this machine", killed)
	}
	cmd, stderr := child(t, "work", path)
	if err := cmd.Wait(); err != nil {
		t.Fatalf("last child: %v; %s", err, stderr)
	}
	checkAllDone(t, path)
}

// checkAllDone: every shot is there once, done, each pass ended well exactly
// once, and what is shown is what that attempt returned.
func checkAllDone(t *testing.T, path string) {
	t.Helper()
	s, err := queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	all, err := s.Shots(t.Context(), queue.Filter{Limit: 10 * crashShots})
	if err != nil {
		t.Fatal(err)
	}
	seen := map[string]bool{}
	crashed := 0
	for _, sh := range all {
		seen[sh.Name] = true
		_, attempts, err := s.Shot(t.Context(), sh.ID)
		if err != nil {
			t.Fatal(err)
		}
		done := map[queue.Pass]int{}
		for _, a := range attempts {
			switch a.Outcome {
			case queue.OutcomeDone:
				done[a.Pass]++
			case queue.OutcomeCrashed:
				crashed++
			default:
				t.Errorf("shot %s: an attempt ended %q: %s", sh.Name, a.Outcome, a.Error)
			}
			if a.Pass == queue.Full && a.Outcome == queue.OutcomeDone && string(sh.Summary) != strconv.FormatInt(a.ID, 10) {
				t.Errorf("shot %s shows %s, want attempt %d", sh.Name, sh.Summary, a.ID)
			}
		}
		if sh.State != queue.StateDone || done[queue.Full] != 1 || done[queue.Quick] != 1 {
			t.Errorf("shot %s: %s, done %v times, want done, once per pass", sh.Name, sh.State, done)
		}
	}
	if len(all) != crashShots || len(seen) != crashShots {
		t.Errorf("%d shots with %d names, want %d", len(all), len(seen), crashShots)
	}
	t.Logf("%d attempts were cut off by a kill", crashed)
}

// A shot that kills the process every time is given up after MaxAttempts, and
// the others are done. After its first crash it runs before anything else, with
// nothing beside it.
func TestPoison(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	for i := 0; ; i++ {
		if i > 20 {
			t.Fatal("the poisoned shot was not given up in 20 starts")
		}
		cmd, stderr := child(t, "poison", path)
		err := cmd.Wait()
		if strings.Contains(stderr.String(), "child:") {
			t.Fatalf("child failed by itself: %s", stderr)
		}
		if err == nil {
			break
		}
	}
	s, err := queue.Open(t.Context(), queue.Options{Path: path, MaxAttempts: 3})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	bad, err := s.ShotNamed(t.Context(), "bay", poisonName)
	if err != nil {
		t.Fatal(err)
	}
	_, attempts, err := s.Shot(t.Context(), bad.ID)
	if err != nil {
		t.Fatal(err)
	}
	if bad.State != queue.StateQuarantined || len(attempts) != 3 || !strings.Contains(bad.Reason, "3 attempts") {
		t.Errorf("poisoned shot: %s (%s) after %d attempts, want quarantined after 3", bad.State, bad.Reason, len(attempts))
	}
	if counts, err := s.Counts(t.Context(), ""); err != nil || counts[queue.StateDone] != poisonShots-1 {
		t.Errorf("counts: %v, %v, want %d done", counts, err, poisonShots-1)
	}
	checkAlone(t, filepath.Dir(path))
}

// checkAlone reads the notes of all children: within each process, suspects
// come first, and a process that a suspect killed started nothing else with it.
func checkAlone(t *testing.T, dir string) {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(dir, "starts"))
	if err != nil {
		t.Fatal(err)
	}
	ordinary := map[string]bool{} // by process: an ordinary job was started
	suspectKills := 0
	for line := range strings.Lines(string(text)) {
		var name, pass, pid string
		var suspect bool
		if _, err := fmt.Sscan(line, &name, &pass, &suspect, &pid); err != nil {
			t.Fatalf("note %q: %v", line, err)
		}
		if suspect && ordinary[pid] {
			t.Errorf("suspect %s was started after an ordinary job", name)
		}
		if !suspect {
			ordinary[pid] = true
		}
		if suspect && name == poisonName {
			suspectKills++
		}
	}
	if suspectKills != 2 {
		t.Errorf("the poisoned shot was started as a suspect %d times, want 2", suspectKills)
	}
}
