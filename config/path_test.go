package config

import (
	"path/filepath"
	"runtime"
	"strings"
	"testing"
)

func TestWindowsPaths(t *testing.T) {
	for written, want := range map[string]string{
		`'D:\drop\streak'`:            `D:\drop\streak`,
		`"D:\\drop\\streak"`:          `D:\drop\streak`,
		`'\\server\share\new drop'`:   `\\server\share\new drop`,
		`"\\\\server\\share\\tools"`:  `\\server\share\tools`,
		`'D:\temp\new\u1234\x'`:       `D:\temp\new\u1234\x`,
		`'C:\Users\Müller\Kamera 1\'`: `C:\Users\Müller\Kamera 1\`,
	} {
		c, err := Parse([]byte(change(`"s"`, written)), "u.toml")
		if err != nil {
			t.Errorf("%s: %v", written, err)
			continue
		}
		if runtime.GOOS == "windows" {
			want = filepath.Clean(want)
		}
		if got := c.Station[0].Streak.Folder; got != want {
			t.Errorf("%s: got %s, want %s", written, got, want)
		}
	}
}

// TestEveryEscape writes each path that double quotes can spoil and checks
// that it is refused with the advice to use single quotes.
func TestEveryEscape(t *testing.T) {
	for c := 'a'; c <= 'z'; c++ {
		for _, path := range []string{`D:\` + string(c) + `rop`, `D:\` + strings.ToUpper(string(c)) + `rop`} {
			_, err := Parse([]byte(change(`"s"`, `"`+path+`"`)), "u.toml")
			if err == nil {
				t.Errorf("%s in double quotes accepted", path)
			} else if !strings.Contains(err.Error(), "Windows paths in single quotes") {
				t.Errorf("%s: %v", path, err)
			}
		}
	}
}

func TestReaches(t *testing.T) {
	for _, c := range []struct {
		a, b  string
		depth int
		want  bool
	}{
		{"/d/s", "/d/s", 0, true},
		{"/d/s", "/d/r", 5, false},
		{"/d", "/d/s/x", 1, false},
		{"/d", "/d/s/x", 2, true},
		{"/d/s/x", "/d", 2, false},
		{"/d/s", "/d/streak", 2, false},
		{`D:\Drop`, `d:\drop\`, 0, true},
		{`D:\drop`, `D:/drop/streak`, 1, true},
		{`\\nas\Drop`, `\\NAS\drop`, 0, true},
	} {
		if got := reaches(c.a, c.b, c.depth); got != c.want {
			t.Errorf("reaches(%s, %s, %d) = %v", c.a, c.b, c.depth, got)
		}
	}
}

func TestNearest(t *testing.T) {
	known := []string{"folder", "stamp", "clock", "quiet"}
	for word, want := range map[string]string{
		"foldr": "folder", "fodler": "folder", "FOLDER": "folder", "stmap": "stamp", "zzzz": "", "": "", "clocks": "clock",
	} {
		if got := nearest(word, known); got != want {
			t.Errorf("%q: got %q, want %q", word, got, want)
		}
	}
	if d := distance("ca", "abc"); d != 3 { // the textbook case that sets the restricted distance apart (unrestricted: 2)
		t.Errorf("distance(ca, abc) = %d", d)
	}
}
