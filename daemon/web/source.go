package web

import (
	"context"
	"errors"
	"io"
	"time"
)

// Source is what the pages show. Every method honours its context and may be
// called from many goroutines.
type Source interface {
	// Now returns the state of the service. It is called at most once a
	// second. A Snapshot without Time counts as no answer: the page then
	// goes on showing the one before, and its age.
	Now(ctx context.Context) Snapshot

	// Shots returns one page of the shots that pass the filter, latest
	// first. It returns ErrCursor for a Filter.After it did not hand out.
	Shots(ctx context.Context, f Filter) (Page, error)

	// Shot returns everything about one shot, or ErrNotFound.
	Shot(ctx context.Context, id int64) (ShotDetail, error)

	// Open opens a result file of a shot, or returns ErrNotFound. The name
	// is one of the fixed list in file.go; the implementer confines it to
	// the shot's folder all the same (os.Root), and opens it so that a
	// newer result can still be renamed into place.
	Open(ctx context.Context, shot int64, name string) (io.ReadSeekCloser, Info, error)

	// Changed returns a channel that receives after something changed.
	// Several changes may be one receive. Only Run receives from it.
	Changed() <-chan struct{}

	// Ready returns the named checks that decide whether work gets done:
	// folders readable, queue open, workers alive.
	Ready(ctx context.Context) []Check

	// Alive returns an error when the main loop has stopped turning.
	Alive(ctx context.Context) error
}

// Errors a Source returns for the page to answer with 404 and 400.
var (
	ErrNotFound = errors.New("not found")
	ErrCursor   = errors.New("unknown place in the list")
)

// Snapshot is the state of the service at one time.
type Snapshot struct {
	Campaign string
	Time     time.Time // when it was taken
	Fault    string    // what of it is missing or old, and why; empty: complete

	Queue     Queue
	Stations  []Station
	Attention []Attention // what needs a person, most urgent first, cut to a readable number
	More      int         // how many of those were cut
	Recent    []Shot      // latest first; the first one is shown large
}

// Queue is what the health line is made from.
type Queue struct {
	Waiting  int           // shots that could be worked on and are not
	Running  int           // shots being worked on
	Retrying int           // failed shots that will be tried again
	Oldest   time.Duration // how long the oldest waiting shot waits
	Slots    int           // shots that can run at once
	PerShot  time.Duration // usual time of one shot; 0: not known yet
	Last     time.Time     // when the last shot was done; zero: none yet
	Stopped  string        // why no shot is started (disk full, stopping); empty: it works
}

// Station is one station with its two drop folders.
type Station struct {
	Name    string
	Folders []Folder
	Bundle  string // name of the bundle in use
	Warning string // what is wrong with it (about to run out, none valid); empty: nothing
}

// Folder is one drop folder.
type Folder struct {
	Arm       string // streak or reference
	Path      string
	Condition string    // ok, missing, stuck or failing
	Since     time.Time // since when
	Detail    string    // the error in words, and what to do
	Last      time.Time // when its last file came; zero: none yet
}

// Attention is one thing that waits for a person.
type Attention struct {
	Shot    int64 // 0: not about one shot
	Name    string
	Station string
	State   string
	Since   time.Time
	Text    string // what is wrong
	Remedy  string // what to do
}

// Shot is one line of a list.
type Shot struct {
	ID        int64
	Name      string
	Station   string
	Time      time.Time // of the event, by the streak arm
	State     string    // see States
	Pass      string    // quick look, full or spread: the finest pass that is done; empty: none
	Verdict   string    // see Verdicts; empty: none yet
	Reason    string    // the first reason for it
	Key       []Quantity
	Picture   bool      // contact.png is there
	Published time.Time // of the result shown; zero: none
}

// Quantity is one measured number. A Value of NaN could not be measured, and
// a Sigma of NaN or 0 is not known.
type Quantity struct {
	Name   string
	Value  float64
	Sigma  float64 // one standard deviation
	Unit   string
	Method string
}

// Reason is one reason for a verdict.
type Reason struct {
	Code   string
	Text   string
	Remedy string
}

// Attempt is one try at a shot.
type Attempt struct {
	Number int
	Pass   string
	Host   string
	Start  time.Time
	Took   time.Duration // 0: still running
	Err    string        // empty: none
}

// Frame is one of the two frame files.
type Frame struct {
	Arm  string
	Path string
	Time time.Time // as stamped by its own computer
	Size int64     // bytes
}

// Info is what a download needs to know about a file.
type Info struct {
	Name    string
	Size    int64
	ModTime time.Time
}

// ShotDetail is everything about one shot.
type ShotDetail struct {
	Shot
	Reasons    []Reason
	Quantities []Quantity
	Attempts   []Attempt
	Next       time.Time // of the next attempt; zero: none planned
	Frames     []Frame
	Gap        time.Duration // between the two frames, after the clock correction
	Bundle     string
	Folder     string // of the results
	Files      []Info // result files that are there
}

// Filter chooses shots. Empty fields choose all.
type Filter struct {
	Station, State, Verdict string
	Text                    string // a part of the name or the reason
	After                   string // Page.Next of the page before
	Limit                   int
}

// Page is one page of the table.
type Page struct {
	Shots []Shot
	Next  string // to be given as Filter.After; empty: this is the last page
}

// Check is one named condition of readiness.
type Check struct {
	Name   string
	OK     bool
	Detail string // what is wrong and what to do
}

// States lists the states of a shot, Verdicts the grades of a result.
var (
	States   = []string{"waiting", "held", "paired", "running", "done", "failed", "quarantined", "lone"}
	Verdicts = []string{"good", "doubtful", "unusable"}
)
