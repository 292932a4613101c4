package frame

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// TestTags reads times that tifffile, Pillow and astropy stored.
func TestTags(t *testing.T) {
	dir := t.TempDir()
	script(t, "testdata/tags.py", dir)
	b, err := os.ReadFile(filepath.Join(dir, "list.json"))
	if err != nil {
		t.Fatal(err)
	}
	var cases []struct{ File, Time, Field string }
	if err := json.Unmarshal(b, &cases); err != nil || len(cases) == 0 {
		t.Fatalf("%d cases, %v", len(cases), err)
	}
	loc := time.FixedZone("x", -3*3600)
	s, err := NewStamper("tag", loc)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range cases {
		path := filepath.Join(dir, c.File)
		got, err := s.Stamp(path, time.Unix(1, 0))
		f, err2 := Read(path, Limits{})
		if err2 != nil {
			t.Error(err2)
			continue
		}
		if f.TakenFrom != c.Field || f.Taken.IsZero() != (c.Time == "") {
			t.Errorf("%s: taken from %q, want %q", c.File, f.TakenFrom, c.Field)
		}
		if c.Time == "" {
			if !errors.Is(err, ErrStamp) || !strings.Contains(err.Error(), c.File) {
				t.Errorf("%s: %+v, %v, want ErrStamp", c.File, got, err)
			}
			continue
		}
		want, err2 := iso(c.Time, loc)
		wantUTC, err3 := iso(c.Time, time.UTC)
		if err2 != nil || err3 != nil {
			t.Fatal(err2, err3)
		}
		if err != nil || !got.Time.Equal(want) || got.Source != "tag" || got.Weak {
			t.Errorf("%s: %+v (%v), want %v", c.File, got, err, want)
		}
		if !f.Taken.Equal(wantUTC) {
			t.Errorf("%s: frame taken at %v, want %v", c.File, f.Taken, wantUTC)
		}
	}
}

// TestBack lets tifffile, libtiff and numpy read what is written here.
func TestBack(t *testing.T) {
	dir := t.TempDir()
	save := func(name string, data []byte, values any) {
		var want bytes.Buffer
		if err := binary.Write(&want, binary.LittleEndian, values); err != nil {
			t.Fatal(err)
		}
		for n, b := range map[string][]byte{name: data, name + ".want": want.Bytes()} {
			if err := os.WriteFile(filepath.Join(dir, n), b, 0o600); err != nil {
				t.Fatal(err)
			}
		}
	}
	at := time.Date(2031, 5, 6, 7, 8, 9, 120003000, time.UTC)
	for i, s := range [][2]int{{1, 1}, {7, 3}, {300, 200}} {
		pix := make([]uint16, s[0]*s[1])
		for j := range pix {
			pix[j] = uint16(65535 - 257*j)
		}
		var b bytes.Buffer
		stamp := at
		if i == 0 {
			stamp = time.Time{}
		}
		if err := WriteTIFFAt(&b, s[0], s[1], pix, stamp); err != nil {
			t.Fatal(err)
		}
		save(fmt.Sprintf("%d.tif", i), b.Bytes(), pix)
	}
	for i, shape := range [][]int{{}, {5}, {3, 4}, {2, 3, 4}, {1, 2, 3, 4}, {10, 100, 70}} {
		n := 1
		for _, k := range shape {
			n *= k
		}
		data := make([]float32, n)
		for j := range data {
			data[j] = float32(j) * 0.7
		}
		var b bytes.Buffer
		if err := WriteNPY(&b, shape, data); err != nil {
			t.Fatal(err)
		}
		save(fmt.Sprintf("%d.npy", i), b.Bytes(), data)
	}
	out := script(t, "testdata/back.py", dir)
	for _, want := range []string{"0.tif (1, 1) None None\n", "1.tif (3, 7) 2031:05:06 07:08:09 120003000\n",
		"0.npy ()\n", "1.npy (5,)\n", "4.npy (1, 2, 3, 4)\n", "9 files\n"} {
		if !strings.Contains(out, want) {
			t.Errorf("%q is missing in what the tools read:\n%s", want, out)
		}
	}
}

// TestStrptime compares patterns with Python's datetime.strptime, which reads
// the same directives (but %f to six digits only, and no fields of ours).
func TestStrptime(t *testing.T) {
	type pair struct{ Pattern, Name string }
	var list []pair
	for _, c := range stampCases {
		if !strings.ContainsAny(c.pattern, "{s") {
			list = append(list, pair{c.pattern, c.name})
		}
	}
	for _, p := range []string{"%Y%m%dT%H%M%S.%f", "%y%j-%H%M%S", "%d %b %Y %H %M", "%Y-%m-%d_%H.%M.%S%z", "%b%d%Y%H", "%Y%m%d%H%M%S%f"} {
		at := time.Date(1999, 12, 31, 23, 59, 58, 987654000, time.UTC)
		for range 60 { // steps that visit all months, days and lengths of year
			list = append(list, pair{p, strftime(p, at)})
			at = at.Add(997*time.Hour + 61*time.Second + 1234567*time.Microsecond)
		}
	}
	b, err := json.Marshal(list)
	if err != nil {
		t.Fatal(err)
	}
	const code = `
import sys, json, datetime
out = []
for p in json.loads(sys.argv[1]):
    try:
        t = datetime.datetime.strptime(p["Name"], p["Pattern"])
        t = t if t.tzinfo else t.replace(tzinfo=datetime.timezone.utc)
        out.append((t - datetime.datetime(1970, 1, 1, tzinfo=datetime.timezone.utc)) // datetime.timedelta(microseconds=1))
    except ValueError:
        out.append(None)
print(json.dumps(out))`
	var want []*int64
	if err := json.Unmarshal([]byte(script(t, "-c", code, string(b))), &want); err != nil {
		t.Fatal(err)
	}
	same := 0
	for i, c := range list {
		s, err := NewStamper(c.Pattern, time.UTC)
		if err != nil {
			t.Fatal(err)
		}
		got, err := s.Stamp(c.Name, time.Time{})
		switch {
		case want[i] == nil && err != nil:
		case want[i] != nil && err == nil && got.Time.UnixMicro() == *want[i]:
			same++
		case c.Name == "S_20310506T070809.123456789.tif": // nine digits: ours alone
		case c.Name == "S_2031056T070809.tif": // Python takes 05 and 6
		case c.Name == "20310506070809-03.tif": // Python wants minutes
		default:
			t.Errorf("pattern %q, name %q: %v (%v), Python says %v", c.Pattern, c.Name, got.Time, err, want[i])
		}
	}
	if same < 360 {
		t.Errorf("only %d names read alike", same)
	}
}

// strftime writes the directives that TestStrptime uses.
func strftime(p string, t time.Time) string {
	return strings.NewReplacer("%Y", t.Format("2006"), "%y", t.Format("06"), "%m", t.Format("01"), "%d", t.Format("02"),
		"%j", t.Format("002"), "%b", t.Format("Jan"), "%H", t.Format("15"), "%M", t.Format("04"), "%S", t.Format("05"),
		"%f", fmt.Sprintf("%06d", t.Nanosecond()/1000), "%z", "-0330").Replace(p)
}

// TestPipe: a named pipe is refused, not waited for.
func TestPipe(t *testing.T) {
	path := filepath.Join(t.TempDir(), "pipe.tif")
	if err := syscall.Mkfifo(path, 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := Read(path, Limits{}); !errors.Is(err, ErrFormat) {
		t.Errorf("error %v, want ErrFormat", err)
	}
}
