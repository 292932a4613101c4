package daemon_test

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"io"
	"os"
	"os/exec"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

const module = "unsheard"

// pkg is what the rules look at: a package without its tests.
type pkg struct {
	ImportPath, Name, Dir string
	GoFiles               []string
	Imports               []string
}

// rule says what the packages at a path may import.
type rule struct {
	at      string   // path below the module; "x/..." is x and all below it
	ours    []string // packages of ours, same form
	foreign []string // modules; nil: any
	pure    bool     // no files, no network, no logs, no wall clock
}

var (
	numeric = []string{"pipeline/cube", "pipeline/optics", "pipeline/solve/...", "pipeline/measure", "pipeline/match"}
	gonum   = []string{"gonum.org/v1/gonum"}
	none    = []string{}
)

// rules are the import directions. The first that fits a package holds; a
// package that none fits has no place in the tree.
var rules = []rule{
	{at: "daemon/cmd/unsheard", ours: []string{"..."}},
	{at: "daemon", ours: []string{"..."}},
	{at: "daemon/watch/...", ours: []string{"daemon/watch/..."}},
	{at: "daemon/web/...", ours: []string{"daemon/web/..."}},
	{at: "config/...", ours: []string{"config/..."}},
	{at: "queue/...", ours: []string{"queue/..."}},
	{at: "export/...", ours: []string{"export/...", "pipeline/cube", "pipeline/measure"}},
	{at: "pipeline", ours: []string{"pipeline/..."}},
	{at: "pipeline/cube", ours: numeric, foreign: gonum, pure: true},
	{at: "pipeline/optics", ours: numeric, foreign: gonum, pure: true},
	{at: "pipeline/solve/...", ours: numeric, foreign: gonum, pure: true},
	{at: "pipeline/measure", ours: numeric, foreign: gonum, pure: true},
	{at: "pipeline/match", ours: numeric, foreign: gonum, pure: true},
	{at: "pipeline/frame/...", ours: []string{"pipeline/frame/..."}},
	{at: "pipeline/calib/...", ours: append([]string{"pipeline/calib/...", "pipeline/frame"}, numeric...)},
	// The simulated station judges the rest, so it shares nothing with it.
	{at: "pipeline/rig/...", ours: []string{"pipeline/rig/..."}, foreign: []string{"gonum.org/v1/gonum", "golang.org/x/image"}},
}

// users limits who may import a package, whatever the rules above allow.
var users = map[string][]string{
	"config":              {"daemon", "daemon/cmd/unsheard", "config/..."},
	"daemon":              {"daemon/cmd/unsheard"},
	"daemon/cmd/unsheard": none,
	"pipeline/rig":        {"daemon", "daemon/cmd/unsheard", "pipeline/rig/..."},
}

// shipped lists what no shipped package imports, and who may all the same.
var shipped = map[string][]string{
	"C":                            none,           // the program is built without cgo
	"unsafe":                       {"daemon/..."}, // calls of the operating system
	"testing":                      {"queue/queuetest"},
	"go.uber.org/goleak":           none,
	"github.com/chromedp/chromedp": none,
}

// impure are the packages of the standard library that reach out of memory.
var impure = []string{"os/...", "net/...", "log/...", "syscall", "io/fs", "io/ioutil", "path/filepath", "database/...", "embed", "plugin"}

// clock are the functions of package time that read or wait for the clock.
var clock = []string{"Now", "Since", "Until", "Sleep", "After", "AfterFunc", "Tick", "NewTimer", "NewTicker"}

// fits reports whether a path is one of the patterns.
func fits(p string, patterns []string) bool {
	return slices.ContainsFunc(patterns, func(q string) bool {
		if q == "..." {
			return true
		}
		base, tree := strings.CutSuffix(q, "/...")
		return p == base || tree && strings.HasPrefix(p, base+"/")
	})
}

// local returns the path below the module, or false for foreign packages.
func local(importPath string) (string, bool) {
	if importPath == module {
		return ".", true
	}
	return strings.CutPrefix(importPath, module+"/")
}

func standard(importPath string) bool {
	first, _, _ := strings.Cut(importPath, "/")
	return !strings.Contains(first, ".")
}

// check returns every import that goes the wrong way.
func check(pkgs []pkg) (faults []string) {
	for _, p := range pkgs {
		at, ok := local(p.ImportPath)
		i := slices.IndexFunc(rules, func(r rule) bool { return fits(at, []string{r.at}) })
		if !ok || i < 0 {
			faults = append(faults, fmt.Sprintf("%s has no place in the tree: move it, or give it a rule", p.ImportPath))
			continue
		}
		for _, imp := range p.Imports {
			if why := refuse(at, imp, rules[i]); why != "" {
				faults = append(faults, fmt.Sprintf("%s imports %s: %s", p.ImportPath, imp, why))
			}
		}
	}
	return faults
}

// refuse says why a package at a path may not import another, or "".
func refuse(at, imp string, r rule) string {
	if who, ok := shipped[imp]; ok && !fits(at, who) {
		return "not in shipped code"
	}
	if to, ours := local(imp); ours {
		if who, ok := users[to]; ok && !fits(at, who) {
			return "only " + strings.Join(who, ", ") + " may"
		}
		if !fits(to, r.ours) {
			return "imports point the other way"
		}
		return ""
	}
	switch {
	case standard(imp):
		if r.pure && fits(imp, impure) {
			return "a numerical package touches nothing but memory"
		}
	case r.foreign != nil && !slices.ContainsFunc(r.foreign, func(m string) bool { return imp == m || strings.HasPrefix(imp, m+"/") }):
		return "only the standard library and " + strings.Join(r.foreign, ", ") + " are allowed"
	}
	return ""
}

// readsClock returns the places of a source file that use the wall clock.
func readsClock(name string, src []byte) ([]string, error) {
	set := token.NewFileSet()
	f, err := parser.ParseFile(set, name, src, parser.SkipObjectResolution)
	if err != nil {
		return nil, fmt.Errorf("parse %s: %w", name, err)
	}
	as := ""
	for _, i := range f.Imports {
		if p, _ := strconv.Unquote(i.Path.Value); p == "time" {
			as = "time"
			if i.Name != nil {
				as = i.Name.Name
			}
		}
	}
	if as == "." {
		return []string{name + " imports time into its own names"}, nil
	}
	var out []string
	ast.Inspect(f, func(n ast.Node) bool {
		if s, ok := n.(*ast.SelectorExpr); ok {
			if x, ok := s.X.(*ast.Ident); ok && as != "" && x.Name == as && slices.Contains(clock, s.Sel.Name) {
				out = append(out, fmt.Sprintf("%s uses time.%s", set.Position(s.Pos()), s.Sel.Name))
			}
		}
		return true
	})
	return out, nil
}

// list returns our packages as one operating system sees them; with cgo, so
// that a file of it is not passed over. A package that does not build is for
// the compiler to report.
func list(t *testing.T, goos string) []pkg {
	t.Helper()
	c := exec.Command("go", "list", "-e", "-json=ImportPath,Name,Dir,GoFiles,CgoFiles,Imports", "./...")
	c.Dir = ".."
	c.Env = append(os.Environ(), "GOOS="+goos, "CGO_ENABLED=1")
	var stderr bytes.Buffer
	c.Stderr = &stderr
	out, err := c.Output()
	if err != nil {
		t.Fatalf("go list for %s: %v\n%s", goos, err, stderr.Bytes())
	}
	var pkgs []pkg
	for d := json.NewDecoder(bytes.NewReader(out)); ; {
		var p pkg
		if err := d.Decode(&p); errors.Is(err, io.EOF) {
			return pkgs
		} else if err != nil {
			t.Fatal(err)
		}
		pkgs = append(pkgs, p)
	}
}

func TestImportDirections(t *testing.T) {
	for _, goos := range []string{"linux", "windows", "darwin"} {
		pkgs := list(t, goos)
		if len(pkgs) < 5 {
			t.Errorf("%s: only %d packages found", goos, len(pkgs))
		}
		for _, f := range check(pkgs) {
			t.Errorf("%s: %s", goos, f)
		}
		for _, p := range pkgs {
			at, _ := local(p.ImportPath)
			if !fits(at, numeric) {
				continue
			}
			for _, name := range p.GoFiles {
				src, err := os.ReadFile(filepath.Join(p.Dir, name))
				if err != nil {
					t.Fatal(err)
				}
				uses, err := readsClock(path.Join(at, name), src)
				if err != nil {
					t.Fatal(err)
				}
				for _, u := range uses {
					t.Errorf("%s: %s: a numerical package is told the time", goos, u)
				}
			}
		}
	}
}

// TestImportRulesBite makes up one violation of each rule; a rule that lets
// it pass is no rule.
func TestImportRulesBite(t *testing.T) {
	for _, c := range []struct {
		from, to string
		bad      bool
	}{
		{"pipeline/solve", "unsheard/pipeline/optics", false},
		{"pipeline/solve", "gonum.org/v1/gonum/mat", false},
		{"pipeline/match", "time", false},
		{"pipeline/solve", "gonum.org/v1/plot", true},
		{"pipeline/solve", "go.uber.org/zap", true},
		{"pipeline/cube", "os", true},
		{"pipeline/optics", "path/filepath", true},
		{"pipeline/measure", "log/slog", true},
		{"pipeline/match", "net/http", true},
		{"pipeline/measure", "github.com/prometheus/client_golang/prometheus", true},
		{"pipeline/measure", "unsheard/pipeline/frame", true},
		{"pipeline/optics", "unsheard/pipeline", true},
		{"pipeline/cube", "unsafe", true},
		{"pipeline/rig", "golang.org/x/image/tiff", false},
		{"pipeline/rig", "unsheard/pipeline/optics", true},
		{"pipeline/rig", "unsheard/pipeline/solve", true},
		{"pipeline/rig", "unsheard/pipeline/calib", true},
		{"pipeline/rig", "unsheard/pipeline/cube", true},
		{"pipeline/rig", "go.uber.org/zap", true},
		{"pipeline/calib", "unsheard/pipeline/frame", false},
		{"pipeline/calib", "unsheard/pipeline/rig", true},
		{"pipeline/calib", "unsheard/config", true},
		{"pipeline/frame", "unsheard/pipeline/cube", true},
		{"pipeline", "unsheard/pipeline/calib", false},
		{"pipeline", "unsheard/pipeline/rig", true},
		{"pipeline", "unsheard/export", true},
		{"pipeline", "unsheard/queue", true},
		{"export/nexus", "unsheard/pipeline/cube", false},
		{"export", "unsheard/export/nexus", false},
		{"export", "unsheard/pipeline/solve", true},
		{"export/stack", "unsheard/pipeline", true},
		{"queue", "github.com/riverqueue/river", false},
		{"queue", "unsheard/pipeline/match", true},
		{"queue", "unsheard/config", true},
		{"config", "unsheard/queue", true},
		{"daemon", "unsheard/config", false},
		{"daemon", "unsheard/pipeline/rig", false},
		{"daemon", "unsafe", false},
		{"daemon", "unsheard/daemon/cmd/unsheard", true},
		{"daemon/web", "unsheard/queue", true},
		{"daemon/web", "unsheard/config", true},
		{"daemon/watch", "unsheard/pipeline/frame", true},
		{"daemon/watch", "unsheard/daemon", true},
		{"daemon/cmd/unsheard", "unsheard/daemon", false},
		{"daemon/cmd/unsheard", "C", true},
		{"daemon", "testing", true},
		{"queue/queuetest", "testing", false},
		{"daemon/web", "github.com/chromedp/chromedp", true},
		{"util", "fmt", true},
		{"pipeline/common", "fmt", true},
		{"daemon/cmd/other", "fmt", true},
		{"queuefile", "fmt", true},
	} {
		got := check([]pkg{{ImportPath: module + "/" + c.from, Imports: []string{c.to}}})
		if bad := len(got) > 0; bad != c.bad {
			t.Errorf("%s imports %s: found %q, want a fault: %v", c.from, c.to, got, c.bad)
		}
	}
	if got := check([]pkg{{ImportPath: module, Imports: nil}}); len(got) == 0 {
		t.Error("a package at the root passes")
	}
}

func TestClockRuleBites(t *testing.T) {
	for src, want := range map[string]int{
		`package p; import "time"; var t = time.Now()`:                                        1,
		`package p; import w "time"; func f(t w.Time) { w.Sleep(1); _ = w.Since(t) }`:         2,
		`package p; import . "time"; var t = Now()`:                                           1,
		`package p; import "time"; var now = time.Now`:                                        1,
		`package p; import "time"; func f(t time.Time) time.Time { return t.Add(time.Hour) }`: 0,
		`package p; var time struct{ Now int }; var x = time.Now`:                             0,
	} {
		got, err := readsClock("p.go", []byte(src))
		if err != nil {
			t.Fatal(err)
		}
		if len(got) != want {
			t.Errorf("%s: found %q, want %d", src, got, want)
		}
	}
}
