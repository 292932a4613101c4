package daemon

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"go.uber.org/zap"

	"unsheard/export"
	"unsheard/pipeline"
)

// ChildCommand is the hidden command under which the program works on one
// shot for its parent: the task comes as JSON on standard input, the answer
// goes as JSON to standard output, and the end of standard input means that
// the parent is gone.
const ChildCommand = "work-on-one-shot"

// task is what a child is asked to do.
type task struct {
	Job     pipeline.Job `json:"job"`
	Out     string       `json:"out"`     // result folder
	Attempt string       `json:"attempt"` // unique name of this attempt
}

// answer is what a child found.
type answer struct {
	Error     string          `json:"error,omitempty"`
	Permanent bool            `json:"permanent,omitempty"` // another try cannot help
	Place     bool            `json:"place,omitempty"`     // the result folder's place cannot be written now
	Verdict   string          `json:"verdict,omitempty"`
	Summary   json.RawMessage `json:"summary,omitempty"`
}

// exitOrphan is the status of a child whose parent went away.
const exitOrphan = 3

// Child serves one task: it reads it from in and writes the answer to out. It
// ends the process if in ends before the answer is written.
func Child(ctx context.Context, in io.Reader, out io.Writer) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	r := bufio.NewReader(in)
	line, err := r.ReadBytes('\n')
	if err != nil {
		return fmt.Errorf("read task: %w", err)
	}
	var t task
	if err := json.Unmarshal(line, &t); err != nil {
		return fmt.Errorf("read task: %w", err)
	}
	go func() {
		_, _ = io.Copy(io.Discard, r)
		// Nobody waits for the result any more. A partial folder is
		// removed by the next start of the service.
		os.Exit(exitOrphan)
	}()
	return json.NewEncoder(out).Encode(t.run(ctx))
}

func (t *task) run(ctx context.Context) answer {
	log := &journal{}
	res, err := pipeline.Run(ctx, t.Job, log.stage)
	if err != nil {
		return answer{Error: err.Error(), Permanent: pipeline.IsPermanent(err)}
	}
	if err := os.MkdirAll(filepath.Dir(t.Out), 0o755); err != nil {
		return answer{Error: fmt.Sprintf("make the folder of the result: %v", err), Place: true}
	}
	if err := Publish(ctx, t.Out, t.Attempt, res, log.bytes()); err != nil {
		return answer{Error: err.Error(), Place: export.Retryable(err), Permanent: !export.Retryable(err)}
	}
	sum, err := summarise(res)
	if err != nil {
		return answer{Error: err.Error()}
	}
	return answer{Verdict: res.Report.Verdict.Grade, Summary: sum}
}

// Publish writes a result folder.
func Publish(ctx context.Context, dir, attempt string, res *pipeline.Result, log []byte) error {
	prov, err := json.Marshal(res.Provenance)
	if err != nil {
		return fmt.Errorf("publish %q: %w", dir, err)
	}
	r := export.Result{Shot: res.Provenance.Shot, Station: res.Provenance.Station, Pass: res.Provenance.Pass,
		Bundle: res.Provenance.BundleID, Cube: res.Cube, Report: res.Report, Provenance: prov, Log: log}
	for _, p := range res.Planes {
		r.Frames = append(r.Frames, export.FramePlane{Arm: p.Arm, W: p.W, H: p.H,
			Measured: p.Measured, Model: p.Model, Variance: p.Variance})
	}
	return export.Publish(ctx, dir, r, export.Options{Attempt: attempt})
}

// journal collects the stages of a job as JSON lines.
type journal struct {
	mu  sync.Mutex // guards buf
	buf []byte
}

func (j *journal) stage(e pipeline.Event) {
	b, err := json.Marshal(e)
	if err != nil {
		return // an Event holds only strings and finite numbers
	}
	j.mu.Lock()
	defer j.mu.Unlock()
	j.buf = append(append(j.buf, b...), '\n')
}

func (j *journal) bytes() []byte {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.buf
}

// child runs a task in a process of its own.
type child struct {
	exe    string // program
	logger *zap.Logger
}

// patience is how long a child whose standard input was closed may take to
// end before it is killed.
const patience = 2 * time.Second

func (c *child) do(ctx context.Context, t task, threads int, memory int64) (answer, error) {
	cmd := exec.CommandContext(ctx, c.exe, ChildCommand)
	cmd.Env = append(os.Environ(), fmt.Sprintf("GOMAXPROCS=%d", threads), fmt.Sprintf("GOMEMLIMIT=%d", memory))
	stdin, err := cmd.StdinPipe()
	if err != nil {
		return answer{}, fmt.Errorf("start child: %w", err)
	}
	cmd.Cancel = stdin.Close // first the gentle way
	cmd.WaitDelay = patience // then the other
	var out strings.Builder
	last := &tail{}
	cmd.Stdout, cmd.Stderr = &out, last
	if err := cmd.Start(); err != nil {
		return answer{}, fmt.Errorf("start child: %w", err)
	}
	// A child that dies at once makes this fail; its exit status says more.
	werr := json.NewEncoder(stdin).Encode(t)
	err = cmd.Wait()
	if ctx.Err() != nil {
		return answer{}, context.Cause(ctx)
	}
	if err != nil {
		return answer{}, fmt.Errorf("worker process ended with %w%s", err, last.text())
	}
	if werr != nil {
		return answer{}, fmt.Errorf("worker process took no task: %w", werr)
	}
	var a answer
	if err := json.Unmarshal([]byte(out.String()), &a); err != nil {
		return answer{}, fmt.Errorf("worker process gave no answer: %w%s", err, last.text())
	}
	return a, nil
}

// tail keeps the beginning and the end of what a child says on standard error.
type tail struct {
	head, end []byte
}

const tailBytes = 2 << 10

func (t *tail) Write(p []byte) (int, error) {
	n := len(p)
	if room := tailBytes - len(t.head); room > 0 {
		k := min(room, len(p))
		t.head = append(t.head, p[:k]...)
		p = p[k:]
	}
	t.end = append(t.end, p...)
	if over := len(t.end) - tailBytes; over > 0 {
		t.end = append(t.end[:0], t.end[over:]...)
	}
	return n, nil
}

func (t *tail) text() string {
	if len(t.head) == 0 {
		return ""
	}
	s := string(t.head)
	if len(t.end) > 0 {
		s += " … " + string(t.end)
	}
	return ": " + strings.TrimSpace(s)
}

// Executable returns the path of the running program.
func Executable() (string, error) {
	exe, err := os.Executable()
	if err != nil {
		return "", errors.Join(errors.New("cannot find this program's own file, which the worker processes run"), err)
	}
	return exe, nil
}
