package daemon

import (
	"context"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"sort"
	"strings"
	"time"

	"unsheard/config"
	"unsheard/pipeline"
	"unsheard/pipeline/calib"
	"unsheard/pipeline/frame"
	"unsheard/queue"
)

// Finding is one thing that Check looked at.
type Finding struct {
	Station string `json:"station,omitempty"`
	What    string `json:"what"`
	OK      bool   `json:"ok"`
	Detail  string `json:"detail"`           // what was seen
	Remedy  string `json:"remedy,omitempty"` // what to do, if it is not OK
}

// checker collects findings.
type checker struct {
	c   *config.Config
	out []Finding
}

func (k *checker) good(station, what, format string, a ...any) {
	k.out = append(k.out, Finding{station, what, true, fmt.Sprintf(format, a...), ""})
}

func (k *checker) bad(station, what, remedy, format string, a ...any) {
	k.out = append(k.out, Finding{station, what, false, fmt.Sprintf(format, a...), remedy})
}

// Check looks at everything that would keep the service from working tonight:
// folders, stamps, bundles, disk, memory, address and ledger. It changes
// nothing but for an empty probe file that it makes and removes where results
// will be written.
func Check(ctx context.Context, c *config.Config) []Finding {
	k := &checker{c: c}
	k.state(ctx)
	k.address()
	for i := range c.Station {
		k.station(&c.Station[i])
	}
	return k.out
}

func (k *checker) state(ctx context.Context) {
	dir := k.c.Campaign.State
	if err := probe(dir, true); err != nil {
		k.bad("", "state folder", "give this user the right to write there, or set campaign.state", "%v", err)
		return
	}
	k.good("", "state folder", "%s can be written", dir)
	k.space("", "state folder", dir)
	if !exists(LedgerPath(k.c)) {
		k.good("", "ledger", "none yet; the service makes it")
		return
	}
	r, err := queue.OpenReadOnly(ctx, LedgerPath(k.c))
	if err != nil {
		k.bad("", "ledger", "put the file aside or restore a copy", "%v", err)
		return
	}
	defer r.Close()
	counts, err := r.Counts(ctx, "")
	if err != nil {
		k.bad("", "ledger", "put the file aside or restore a copy", "%v", err)
		return
	}
	k.good("", "ledger", "%d shots done, %d waiting, %d given up", counts[queue.StateDone], counts[queue.StatePaired], counts[queue.StateQuarantined])
}

func (k *checker) address() {
	l, err := net.Listen("tcp", k.c.Page.Listen)
	if err != nil {
		k.bad("", "page", "set page.listen to a free port, unless this is the service itself running", "%v", err)
		return
	}
	l.Close()
	k.good("", "page", "%s is free", k.c.Page.Listen)
}

func (k *checker) station(s *config.Station) {
	var b *calib.Bundle
	dir, err := calib.Find(s.Bundle, time.Now())
	if err == nil {
		b, err = calib.Load(dir)
	}
	if err != nil {
		k.bad(s.Name, "bundle", "make one with unsheard calibrate and put it there", "%v", err)
	} else {
		k.bundle(s, dir, b)
	}
	k.folder(s, "streak", &s.Streak, b)
	k.folder(s, "reference", &s.Reference, b)
	p := newPlace(k.c, s)
	if err := probe(p.root, false); err != nil {
		k.bad(s.Name, "results", "make the folder, check its share, give this user the right to write there, or set results.folder", "%v", err)
		return
	}
	k.good(s.Name, "results", "%s can be written", p.root)
	k.space(s.Name, "results", p.root)
}

func (k *checker) bundle(s *config.Station, dir string, b *calib.Bundle) {
	detail := fmt.Sprintf("%s, made %s, %d×%d px, %d frames over %.4g ps", filepath.Base(dir), b.Created.Format(time.DateTime),
		b.Window.W, b.Window.H, b.Frames, b.Edges()[b.Frames]-b.Edges()[0])
	switch left := time.Until(b.ValidUntil); {
	case b.Station != s.Name:
		k.bad(s.Name, "bundle", "point station.bundle to this station's own bundles", "it was made for station %q: %s", b.Station, detail)
	case !b.ValidUntil.IsZero() && left < expiring:
		k.bad(s.Name, "bundle", "take a new calibration series", "its validity ends in %v: %s", left.Round(time.Minute), detail)
	default:
		k.good(s.Name, "bundle", "%s", detail)
	}
	total, err := memory(k.c)
	if err != nil {
		k.bad(s.Name, "memory", "set work.memory", "%v", err)
		return
	}
	need := pipeline.Bytes(b.Frames, b.Window.H, b.Window.W, b.Streak.W*b.Streak.H+b.Reference.W*b.Reference.H)
	if need > total {
		k.bad(s.Name, "memory", "raise work.memory, or calibrate a smaller window or span",
			"a full pass needs about %d MB, work.memory allows %d MB", need/1e6, total/1e6)
		return
	}
	k.good(s.Name, "memory", "a full pass needs about %d MB; %d fit into work.memory, %d slots", need/1e6, total/need, slots(k.c))
}

// newest is how many of a folder's latest files are looked at.
const newest = 5

func (k *checker) folder(s *config.Station, arm string, a *config.Arm, b *calib.Bundle) {
	what := arm + " folder"
	st, err := frame.NewStamper(a.Stamp, a.Location())
	if err != nil {
		k.bad(s.Name, arm+" stamp", "mend the pattern", "%v", err)
		return
	}
	entries, err := os.ReadDir(a.Folder)
	if err != nil {
		k.bad(s.Name, what, "check the path, the share and the rights", "%v", err)
		return
	}
	var match, other []string
	for _, e := range entries {
		if e.IsDir() || strings.HasPrefix(e.Name(), ".") {
			continue
		}
		if st.Match(e.Name()) {
			match = append(match, e.Name())
		} else {
			other = append(other, e.Name())
		}
	}
	sort.Strings(match)
	switch {
	case len(match) > 0:
		k.good(s.Name, what, "%d frame files, %d others", len(match), len(other))
	case len(other) > 0:
		k.bad(s.Name, what, "compare the stamp pattern with the names", "none of its %d files fits %q, such as %q", len(other), a.Stamp, other[0])
		return
	default:
		k.good(s.Name, what, "%s is empty", a.Folder)
		return
	}
	k.frames(s, arm, a, b, st, match[max(0, len(match)-newest):])
}

// frames reads stamps and shapes of the latest files.
func (k *checker) frames(s *config.Station, arm string, a *config.Arm, b *calib.Bundle, st *frame.Stamper, names []string) {
	var faults []error
	for _, n := range names {
		p := filepath.Join(a.Folder, n)
		info, err := os.Stat(p)
		if err != nil {
			faults = append(faults, err)
			continue
		}
		stamp, err := st.Stamp(p, info.ModTime())
		if err != nil {
			faults = append(faults, err)
			continue
		}
		if late := time.Since(stamp.Time); !stamp.Time.IsZero() && late < -time.Hour {
			faults = append(faults, fmt.Errorf("%s is stamped %v in the future: check %s.clock, the time zone", n, (-late).Round(time.Second), arm))
		}
		w, h, err := frame.Shape(p, frame.Limits{})
		if err != nil {
			faults = append(faults, err)
			continue
		}
		if b == nil {
			continue
		}
		want, turned := &b.Streak, b.Direction == "left" || b.Direction == "right"
		if arm == "reference" {
			want, turned = &b.Reference, false
		}
		if turned {
			w, h = h, w
		}
		if w != want.W || h != want.H {
			faults = append(faults, fmt.Errorf("%s is %d×%d pixels (turned), the bundle was made for %d×%d", n, w, h, want.W, want.H))
		}
	}
	if err := errors.Join(faults...); err != nil {
		k.bad(s.Name, arm+" frames", "see each file", "%v", err)
		return
	}
	k.good(s.Name, arm+" frames", "stamps and shapes of the latest %d are right", len(names))
}

func (k *checker) space(station, what, dir string) {
	n, err := free(dir)
	if err != nil {
		k.bad(station, what+" space", "check the disk or the share", "%v", err)
		return
	}
	if keep := int64(k.c.Disk.KeepFree); n < keep {
		k.bad(station, what+" space", "make room, or lower disk.keep_free", "%d MB free, disk.keep_free asks for %d MB", n/1e6, keep/1e6)
		return
	}
	k.good(station, what+" space", "%.3g GB free", float64(n)/1e9)
}

// probe makes and removes an empty file in dir, which it makes first if asked.
func probe(dir string, makeIt bool) error {
	if makeIt {
		if err := os.MkdirAll(dir, 0o755); err != nil {
			return err
		}
	}
	f, err := os.CreateTemp(dir, ".unsheard-probe-*")
	if err != nil {
		return err
	}
	name := f.Name()
	return errors.Join(f.Close(), os.Remove(name))
}
