package main

import (
	"bytes"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"unsheard/queue"
)

// run0 executes a command line and returns its exit code and output.
func run0(t *testing.T, args ...string) (code int, out, errOut string) {
	t.Helper()
	var o, e bytes.Buffer
	code = execute(t.Context(), args, strings.NewReader(""), &o, &e)
	return code, o.String(), e.String()
}

func TestHelpHasAnExample(t *testing.T) {
	for _, c := range command().Commands() {
		if c.Hidden || c.Name() == "help" || c.Name() == "completion" {
			continue
		}
		code, out, _ := run0(t, c.Name(), "--help")
		if code != exitGood || !strings.Contains(out, "Examples:") || !strings.Contains(out, "unsheard "+c.Name()) {
			t.Errorf("%s --help: exit %d, no example:\n%s", c.Name(), code, out)
		}
	}
}

func TestCommandsOfThisVersion(t *testing.T) {
	want := map[string]bool{"watch": true, "demo": true, "reconstruct": true, "calibrate": true, "simulate": true, "shots": true, "check": true}
	for _, c := range command().Commands() {
		delete(want, c.Name())
	}
	if len(want) > 0 {
		t.Errorf("missing: %v", want)
	}
}

func TestExitCodes(t *testing.T) {
	dir := t.TempDir()
	wrong := filepath.Join(dir, "wrong.toml")
	if err := os.WriteFile(wrong, []byte("[campaign]\nnmae = \"x\"\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	cases := []struct {
		name string
		args []string
		code int
		says string
	}{
		{"no such command", []string{"celebrate"}, exitFail, "unknown command"},
		{"unknown flag", []string{"watch", "--fast"}, exitFail, "unknown flag"},
		{"missing flags", []string{"reconstruct"}, exitFail, "required flag"},
		{"no configuration", []string{"check", "--config", filepath.Join(dir, "none.toml")}, exitFail, "none.toml"},
		{"mistake in it", []string{"watch", "--config", wrong}, exitFail, wrong + ":2:1"},
		{"names the right key", []string{"shots", "--config", wrong}, exitFail, "name"},
		{"no series", []string{"calibrate", "--series", filepath.Join(dir, "s.toml"), "--out", filepath.Join(dir, "b")}, exitFail, "s.toml"},
		{"no bundle", []string{"reconstruct", "--bundle", dir, "--streak", "a", "--reference", "b", "--out", filepath.Join(dir, "o")}, exitFail, dir},
		{"unknown state", []string{"shots", "--config", wrong, "--state", "tired"}, exitFail, "quarantined"},
		{"bad time", []string{"shots", "--config", wrong, "--since", "yesterday"}, exitFail, "24h"},
		{"version", []string{"--version"}, exitGood, ""},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			code, _, errOut := run0(t, c.args...)
			if code != c.code || !strings.Contains(errOut, c.says) {
				t.Errorf("exit %d, want %d; it says %q, want %q in it", code, c.code, errOut, c.says)
			}
		})
	}
}

// TestCheck has a configuration whose folders are missing: the command runs,
// and its answer is bad, with a remedy for each finding.
func TestCheck(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "unsheard.toml")
	text := `
[campaign]
name = "test"
[[station]]
name = "bay-a"
bundle = "bundles"
[station.streak]
folder = "drop/streak"
stamp = "S_{shot}.tif"
[station.reference]
folder = "drop/reference"
stamp = "R_{shot}.tif"
[page]
listen = "127.0.0.1:0"
`
	if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	code, out, errOut := run0(t, "check", "--config", path, "--json")
	if code != exitBad {
		t.Fatalf("exit %d, want %d: %s%s", code, exitBad, out, errOut)
	}
	var got struct {
		OK       bool
		Findings []struct {
			What, Detail, Remedy string
			OK                   bool
		}
	}
	if err := json.Unmarshal([]byte(out), &got); err != nil {
		t.Fatal(err)
	}
	bad := map[string]bool{}
	for _, f := range got.Findings {
		if !f.OK {
			bad[f.What] = true
			if f.Remedy == "" || f.Detail == "" {
				t.Errorf("finding %+v has no detail or no remedy", f)
			}
		}
	}
	for _, want := range []string{"bundle", "streak folder", "reference folder", "results"} {
		if !bad[want] {
			t.Errorf("%s is missing and was not found: %s", want, out)
		}
	}
	if bad["state folder"] || bad["page"] {
		t.Errorf("found fault with what is right: %s", out)
	}
	if _, err := os.Stat(filepath.Join(dir, "drop")); err == nil {
		t.Error("check made a drop folder")
	}
}

func TestParseWhen(t *testing.T) {
	now := time.Date(2026, 3, 14, 12, 0, 0, 0, time.Local)
	for in, want := range map[string]time.Time{
		"":                     {},
		"24h":                  now.Add(-24 * time.Hour),
		"2026-03-13":           time.Date(2026, 3, 13, 0, 0, 0, 0, time.Local),
		"2026-03-14T09:00:00Z": time.Date(2026, 3, 14, 9, 0, 0, 0, time.UTC),
		"2026-03-14T09:00:00":  time.Date(2026, 3, 14, 9, 0, 0, 0, time.Local),
	} {
		if got, err := parseWhen("--since", in, now); err != nil || !got.Equal(want) {
			t.Errorf("parseWhen(%q) = %v, %v, want %v", in, got, err, want)
		}
	}
}

func TestFirstReason(t *testing.T) {
	s := queue.Shot{Summary: []byte(`{"reasons":[{"text":"too dark","remedy":"more light"}]}`)}
	if got := firstReason(s); got != "too dark: more light" {
		t.Errorf("firstReason = %q", got)
	}
	s.Reason = "given up"
	if got := firstReason(s); got != "given up" {
		t.Errorf("firstReason = %q, want the state's own reason", got)
	}
}
