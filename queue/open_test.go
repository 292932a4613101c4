package queue_test

import (
	"context"
	"database/sql"
	"errors"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"unsheard/queue"
)

func TestLock(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	s, err := queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	_, err = queue.Open(t.Context(), queue.Options{Path: path})
	if !errors.Is(err, queue.ErrLocked) || !strings.Contains(err.Error(), "process "+strconv.Itoa(os.Getpid())) {
		t.Errorf("second open: got %v, want ErrLocked naming process %d", err, os.Getpid())
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	s, err = queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatalf("open after close: %v", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

func TestLockAgainstAnotherProcess(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	cmd, _ := child(t, "work", path)
	_, err := queue.Open(t.Context(), queue.Options{Path: path})
	if !errors.Is(err, queue.ErrLocked) || !strings.Contains(err.Error(), "process "+strconv.Itoa(cmd.Process.Pid)) {
		t.Errorf("open beside process %d: got %v, want ErrLocked naming it", cmd.Process.Pid, err)
	}
	if r, err := queue.OpenReadOnly(t.Context(), path); err != nil {
		t.Errorf("read beside another process: %v", err)
	} else {
		if _, err := r.Counts(t.Context(), ""); err != nil {
			t.Errorf("read beside another process: %v", err)
		}
		r.Close()
	}
	if err := cmd.Process.Kill(); err != nil {
		t.Fatal(err)
	}
	_ = cmd.Wait() // it was killed
	s, err := queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatalf("open after the other was killed: %v", err)
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}

// change runs SQL on a closed ledger.
func change(t *testing.T, path, query string) {
	t.Helper()
	db, err := sql.Open("sqlite", "file:"+path)
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	if _, err := db.Exec(query); err != nil {
		t.Fatal(err)
	}
}

func TestNewerSchemaIsRefused(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	s, err := queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	change(t, path, "update meta set value = '99' where key = 'schema'")
	if _, err := queue.Open(t.Context(), queue.Options{Path: path}); !errors.Is(err, queue.ErrNewer) || !strings.Contains(err.Error(), "99") {
		t.Errorf("open: got %v, want ErrNewer with its number", err)
	}
	if _, err := queue.OpenReadOnly(t.Context(), path); !errors.Is(err, queue.ErrNewer) {
		t.Errorf("read: got %v, want ErrNewer", err)
	}
	change(t, path, "update meta set value = '1' where key = 'schema'")
	if s, err = queue.Open(t.Context(), queue.Options{Path: path}); err != nil {
		t.Fatalf("the refusal left something behind: %v", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

func TestOpenRefuses(t *testing.T) {
	dir := t.TempDir()
	garbage := filepath.Join(dir, "garbage.db")
	if err := os.WriteFile(garbage, []byte(strings.Repeat("not a database ", 1000)), 0o644); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name string
		o    queue.Options
		want string
	}{
		{"no path", queue.Options{}, "Path is empty"},
		{"unknown pass", queue.Options{Path: "x", Passes: []queue.Pass{"slow"}}, `"slow"`},
		{"no deciding pass", queue.Options{Path: "x", Passes: []queue.Pass{queue.Spread}}, "neither quick nor full"},
		{"negative attempts", queue.Options{Path: "x", MaxAttempts: -1}, "MaxAttempts is -1"},
		{"no database", queue.Options{Path: garbage}, "garbage.db"},
		{"folder in the way", queue.Options{Path: dir}, dir},
	} {
		if s, err := queue.Open(t.Context(), c.o); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, want %q", c.name, err, c.want)
			if err == nil {
				s.Close()
			}
		}
	}
	if _, err := queue.OpenReadOnly(t.Context(), filepath.Join(dir, "nothing.db")); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("read a file that is not there: got %v", err)
	}
	if text, err := os.ReadFile(garbage); err != nil || !strings.HasPrefix(string(text), "not a database not") {
		t.Errorf("the foreign file was changed: %v", err)
	}
}

// A job that was taken out of River's table by a foreign hand is queued again.
func TestLostJobIsQueuedAgain(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	s, err := queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	if err := enter(t.Context(), s, 3); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	change(t, path, "delete from river_job where id <= 3")
	s, err = queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	workAll(t, s, 3)
}

// Jobs queued before the machine's clock was set back by an hour do not wait
// for that hour.
func TestClockSetBack(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	s, err := queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	if err := enter(t.Context(), s, 3); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	change(t, path, "update river_job set scheduled_at = datetime(scheduled_at, '+1 hour', 'subsec')")
	s, err = queue.Open(t.Context(), queue.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	workAll(t, s, 3)
}

// workAll runs the queue until n shots are done.
func workAll(t *testing.T, s *queue.Store, n int) {
	t.Helper()
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, &noter{dir: t.TempDir()}, queue.RunOptions{Slots: 2}) }()
	changes, stop := s.Changes()
	defer stop()
	for {
		ok, err := finished(ctx, &s.Reader, n)
		if err != nil {
			t.Fatal(err)
		}
		if ok {
			break
		}
		select {
		case <-changes:
		case err := <-done:
			t.Fatalf("run ended early: %v", err)
		}
	}
	cancel()
	if err := <-done; err != nil {
		t.Fatal(err)
	}
}
