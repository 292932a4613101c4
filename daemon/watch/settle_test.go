package watch

import (
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"
)

// play runs a script against a settler and returns what was given.
type play struct {
	t     *testing.T
	s     *settler
	disk  map[string]content
	now   time.Duration
	given []string
}

var dawn = time.Date(2026, 3, 1, 6, 0, 0, 0, time.UTC)

func (p *play) look(rel string) {
	at := dawn.Add(p.now)
	c, ok := p.disk[rel]
	if !ok {
		p.s.vanish(rel)
		return
	}
	if p.s.observe(rel, c, at, at) {
		p.given = append(p.given, fmt.Sprintf("%d %s %d %d", p.now.Milliseconds(), rel, c.size, c.mod.Unix()))
	}
}

// until keeps the appointments up to a time.
func (p *play) until(end time.Duration) {
	for ; p.now < end; p.now += 10 * time.Millisecond {
		names := p.s.due(dawn.Add(p.now), chunk)
		slices.Sort(names)
		for _, rel := range names {
			p.look(rel)
		}
	}
}

func (p *play) line(text string) {
	var n int64
	if _, err := fmt.Sscanf(text, "quiet %d", &n); err == nil {
		p.s.quiet = time.Duration(n) * time.Millisecond
		return
	}
	if _, err := fmt.Sscanf(text, "longest %d", &n); err == nil {
		p.s.longest = time.Duration(n) * time.Millisecond
		return
	}
	var verb, rel string
	var size, mod int64
	if got, _ := fmt.Sscanf(text, "%d %s %s %d %d", &n, &verb, &rel, &size, &mod); got < 2 {
		p.t.Fatalf("cannot read %q", text)
	}
	p.until(time.Duration(n) * time.Millisecond)
	c := content{size, time.Unix(mod, 0)}
	switch verb {
	case "write":
		p.disk[rel] = c
	case "remove":
		delete(p.disk, rel)
	case "known": // as a database may return it
		p.s.remember(rel, content{size, c.mod.Add(300 * time.Microsecond)})
	case "list":
		for _, rel := range slices.Sorted(maps.Keys(p.disk)) {
			if p.s.pending[rel] == nil {
				p.look(rel)
			}
		}
	default:
		p.t.Fatalf("cannot read %q", text)
	}
}

func TestScripts(t *testing.T) {
	files, err := filepath.Glob("testdata/*.script")
	if err != nil || len(files) == 0 {
		t.Fatal("no scripts", err)
	}
	for _, file := range files {
		t.Run(filepath.Base(file), func(t *testing.T) {
			data, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			todo, want, ok := strings.Cut(string(data), "\nwant\n")
			if !ok {
				t.Fatal(`no line "want"`)
			}
			p := &play{t: t, s: newSettler(0, 0), disk: map[string]content{}}
			for _, text := range strings.Split(todo, "\n") {
				if text != "" && text[0] != '#' {
					p.line(text)
				}
			}
			p.until(p.now + 2*time.Minute)
			if got := strings.Join(p.given, "\n"); got != strings.TrimSpace(want) {
				t.Errorf("given\n%s\nwant\n%s", got, want)
			}
			if len(p.s.pending) != 0 || !p.s.next().IsZero() {
				t.Errorf("still followed: %v", p.s.pending)
			}
		})
	}
}

// TestSlowLook counts quiet time only between the end of one look and the
// begin of the next: a share that takes its time proves nothing.
func TestSlowLook(t *testing.T) {
	s := newSettler(time.Second, time.Minute)
	c := content{5, dawn}
	if s.observe("a", c, dawn, dawn.Add(900*time.Millisecond)) {
		t.Error("settled at first sight")
	}
	if s.observe("a", c, dawn.Add(1800*time.Millisecond), dawn.Add(3*time.Second)) {
		t.Error("settled after 0.9 s between two looks")
	}
	if !s.observe("a", c, dawn.Add(1900*time.Millisecond), dawn.Add(3*time.Second)) {
		t.Error("not settled after 1 s between two looks")
	}
}

func TestAbsent(t *testing.T) {
	s := newSettler(time.Second, time.Minute)
	s.observe("old", content{5, dawn}, dawn, dawn)
	s.observe("new", content{5, dawn}, dawn, dawn.Add(2*time.Second))
	s.absent(map[string]struct{}{}, dawn.Add(time.Second))
	if s.pending["old"] != nil || s.pending["new"] == nil {
		t.Errorf("followed: %v; want only what was seen after the listing began", s.pending)
	}
}

func TestIgnored(t *testing.T) {
	for rel, want := range map[string]bool{
		"a.tif": false, "sub/a.tif": false, ".a.tif": true, "~a.tif": true, "a.tif~": true, "a.TIF.TMP": true,
		"a.shot": true, "a.shot/cube.nxs": true, "sub/a.shot/versions/1/x": true, "$RECYCLE.BIN/a.tif": true, "shot.tif": false,
	} {
		if got := hidden(rel); got != want {
			t.Errorf("hidden(%q) = %v", rel, got)
		}
	}
}
