package queue

import (
	"encoding/json"
	"time"
)

// Arm names one of a station's two cameras.
type Arm string

// The two arms.
const (
	Streak    Arm = "streak"
	Reference Arm = "reference"
)

// Pass names one way of working on a shot.
type Pass string

// The passes, in the order in which their results replace each other.
const (
	Quick  Pass = "quick"  // coarse and fast
	Full   Pass = "full"   // full resolution
	Spread Pass = "spread" // uncertainty by resampling, when idle
)

// State is the state of a shot; see the package comment.
type State string

// The states of a shot.
const (
	StateWaiting     State = "waiting"     // one arm seen
	StateHeld        State = "held"        // ambiguous, needs a person
	StatePaired      State = "paired"      // complete, to be worked on
	StateRunning     State = "running"     // being worked on
	StateDone        State = "done"        // has a result
	StateFailed      State = "failed"      // will be tried again
	StateQuarantined State = "quarantined" // given up
	StateLone        State = "lone"        // its partner never came
)

// States lists every state of a shot.
func States() []State {
	return []State{StateWaiting, StateHeld, StatePaired, StateRunning, StateDone, StateFailed, StateQuarantined, StateLone}
}

// FrameState is the state of a frame file; see the package comment.
type FrameState string

// The states of a frame file.
const (
	FrameWaiting  FrameState = "waiting"
	FrameRejected FrameState = "rejected" // cannot take part in pairing; Reason says why
	FrameHeld     FrameState = "held"
	FrameLone     FrameState = "lone"
	FrameMatched  FrameState = "matched"
	FrameReplaced FrameState = "replaced" // matched, and changed afterwards
	FrameParted   FrameState = "parted"   // taken out of a shot by hand: only a hand pairs it again
)

// Frame is one frame file. AddFrames reads the fields above the line.
type Frame struct {
	Station     string    `json:"station"`
	Arm         Arm       `json:"arm"`
	Path        string    `json:"path"` // the file's identity within its station and arm, as the caller names it
	Size        int64     `json:"size"` // bytes
	ModTime     time.Time `json:"mod_time"`
	Stamp       time.Time `json:"stamp,omitzero"` // when the camera says it was taken, on that camera's clock
	HasTime     bool      `json:"has_time"`
	Shot        int64     `json:"shot"` // the camera's own shot number
	HasShot     bool      `json:"has_shot"`
	StampSource string    `json:"stamp_source"` // where the stamp was read: name, tag, sidecar, mtime
	Weak        bool      `json:"weak"`         // the stamp may be off by more than the cameras' clocks

	// State is read by AddFrames only if it is FrameRejected; Reason then says
	// why, for a person to read.
	State  FrameState `json:"state"`
	Reason string     `json:"reason"`

	// Set by the store.

	ID     int64     `json:"id"`
	ShotID int64     `json:"shot_id"` // 0: none
	Seen   time.Time `json:"seen"`    // when AddFrames first met this content, by the store's clock
}

// Shot is one event.
type Shot struct {
	ID            int64           `json:"id"`
	Station       string          `json:"station"`
	Name          string          `json:"name"`  // path of the streak frame without its ending (of the reference frame if there is no other)
	Taken         time.Time       `json:"taken"` // the streak frame's stamp, or when the file was seen if it has none
	StreakPath    string          `json:"streak_path"`
	ReferencePath string          `json:"reference_path"`
	Streak        int64           `json:"streak"`    // frame ID, 0: none
	Reference     int64           `json:"reference"` // frame ID, 0: none
	Gap           time.Duration   `json:"gap_ns"`    // reference time minus streak time, clocks corrected
	State         State           `json:"state"`
	Reason        string          `json:"reason"` // why it is in this state, for a person to read
	Verdict       string          `json:"verdict"`
	Summary       json.RawMessage `json:"summary,omitempty"` // what the worker returned
	ResultDir     string          `json:"result_dir"`
	ShownPass     Pass            `json:"shown_pass"`   // the pass that Verdict, Summary and ResultDir came from
	ShownBundle   string          `json:"shown_bundle"` // the bundle they were made with
	BundleID      string          `json:"bundle_id"`    // the bundle it was last queued with
	Replaced      bool            `json:"replaced"`     // a frame file changed after it was used: Retry uses the new one
	Created       time.Time       `json:"created"`
	Updated       time.Time       `json:"updated"`
	Finished      time.Time       `json:"finished,omitzero"` // of the last result of the deciding pass; zero: none yet
}

// Attempt is one start of a worker on a shot. Attempts are kept for ever.
type Attempt struct {
	ID      int64     `json:"id"`
	ShotID  int64     `json:"shot_id"`
	Pass    Pass      `json:"pass"`
	Bundle  string    `json:"bundle"`
	Number  int       `json:"number"` // 1 for the first since the job was queued
	Started time.Time `json:"started"`
	Ended   time.Time `json:"ended,omitzero"` // zero: not yet
	Outcome string    `json:"outcome"`
	Error   string    `json:"error"`
	Host    string    `json:"host"`
}

// Outcomes of an attempt, as in Attempt.Outcome and the metric
// unsheard_attempts_total.
const (
	OutcomeDone        = "done"
	OutcomeFailed      = "failed"      // will be tried again
	OutcomeGivenUp     = "given-up"    // the shot is quarantined
	OutcomeLater       = "later"       // the worker asked for a pause; not counted
	OutcomeInterrupted = "interrupted" // stopped by the service; not counted
	OutcomeSuperseded  = "superseded"  // a redo, Part or Quarantine came meanwhile
	OutcomeDropped     = "dropped"     // ended after it had lost its job; its result was not used
	OutcomeCrashed     = "crashed"     // the process ended under it
)

// states of a row of the table work.
const (
	workQueued      = "queued"
	workLater       = "later"
	workRunning     = "running"
	workFailed      = "failed"
	workDone        = "done"
	workQuarantined = "quarantined"
)

// ns and at convert times to and from the ledger's nanoseconds since 1970;
// 0 stands for the zero time.
func ns(t time.Time) int64 {
	if t.IsZero() {
		return 0
	}
	return t.UnixNano()
}

func at(n int64) time.Time {
	if n == 0 {
		return time.Time{}
	}
	return time.Unix(0, n).UTC()
}
