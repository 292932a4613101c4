package config

import (
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"github.com/pelletier/go-toml/v2"
)

// least is the shortest configuration that is accepted.
const least = `[campaign]
name = "c"
[[station]]
name = "a"
bundle = "b"
[station.streak]
folder = "s"
stamp = "tag"
[station.reference]
folder = "r"
stamp = "tag"
`

func TestDefaults(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "unsheard.toml")
	if err := os.WriteFile(path, []byte(least), 0o600); err != nil {
		t.Fatal(err)
	}
	got, err := Load(path)
	if err != nil {
		t.Fatal(err)
	}
	arm := func(folder string) Arm {
		return Arm{Folder: filepath.Join(dir, folder), Stamp: "tag", Clock: "UTC",
			Quiet: Duration(time.Second), Rescan: Duration(10 * time.Second), Depth: 2}
	}
	want := &Config{
		Campaign: Campaign{Name: "c", State: filepath.Join(dir, "state")},
		Station: []Station{{Name: "a", Bundle: filepath.Join(dir, "b"), Streak: arm("s"), Reference: arm("r"),
			Pair: Pair{Within: Duration(5 * time.Millisecond), Grace: Duration(20 * time.Second)}}},
		Work: Work{Slots: 0, Memory: Percent{Of: 70}, Timeout: Duration(10 * time.Minute), Attempts: 4,
			Stop: Duration(30 * time.Second), Quick: true, Coarse: 2},
		Results: Results{Beside: "streak", Formats: []string{"nexus"}},
		Disk:    Disk{KeepFree: 2_000_000_000},
		Page:    Page{Listen: "127.0.0.1:8787"},
		Log:     Log{File: filepath.Join(dir, "state", "unsheard.log"), Level: "info", MaxSize: 20_000_000, Keep: 5},
	}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("got\n%+v\nwant\n%+v", got, want)
	}
	if err := got.Validate(); err != nil {
		t.Errorf("a loaded configuration does not validate: %v", err)
	}
}

func TestGivenValuesWin(t *testing.T) {
	text := strings.Replace(least, `stamp = "tag"`, `stamp = "tag"
clock = "Europe/Berlin"
depth = 0
quiet = "50ms"`, 1) + `[station.pair]
within = "1m30s"
[work]
quick = false
memory = "6GB"
stop = "0s"
[results]
folder = "cubes"
[disk]
keep_free = "0B"
[log]
file = "x.log"
keep = 0
`
	c, err := Parse([]byte(text), "unsheard.toml")
	if err != nil {
		t.Fatal(err)
	}
	s := c.Station[0].Streak
	if s.Depth != 0 || s.Quiet.Std() != 50*time.Millisecond || s.Location().String() != "Europe/Berlin" {
		t.Errorf("streak arm: %+v", s)
	}
	if c.Station[0].Pair.Within.Std() != 90*time.Second || c.Work.Quick || c.Work.Stop != 0 {
		t.Errorf("pair %+v, work %+v", c.Station[0].Pair, c.Work)
	}
	if c.Work.Memory.Bytes(1e12) != 6e9 || c.Disk.KeepFree != 0 || c.Log.Keep != 0 {
		t.Errorf("work %+v, disk %+v, log %+v", c.Work, c.Disk, c.Log)
	}
	if c.Results.Beside != "" || !filepath.IsAbs(c.Results.Folder) || filepath.Base(c.Results.Folder) != "cubes" {
		t.Errorf("results %+v", c.Results)
	}
}

func TestStationsKeepTheirOwnDefaults(t *testing.T) {
	second := strings.NewReplacer(`"a"`, `"b2"`, `"s"`, `"s2"`, `"r"`, `"r2"`).Replace(least[strings.Index(least, "[[station]]"):])
	text := least + "depth = 5\n" + second + "[station.pair]\ngrace = \"1m\"\n"
	c, err := Parse([]byte(text), "unsheard.toml")
	if err != nil {
		t.Fatal(err)
	}
	if len(c.Station) != 2 {
		t.Fatalf("%d stations", len(c.Station))
	}
	if a, b := c.Station[0], c.Station[1]; a.Reference.Depth != 5 || b.Reference.Depth != 2 ||
		a.Pair.Grace.Std() != 20*time.Second || b.Pair.Grace.Std() != time.Minute {
		t.Errorf("stations %+v", c.Station)
	}
}

func TestInlineTables(t *testing.T) {
	text := `campaign = { name = "c" }
station = [
  # one
  { name = "a", bundle = "b", streak = { folder = "s", stamp = "tag", depth = 1 }, reference.folder = "r", reference.stamp = "tag" },
]
`
	c, err := Parse([]byte(text), "unsheard.toml")
	if err != nil {
		t.Fatal(err)
	}
	if c.Station[0].Streak.Depth != 1 || c.Station[0].Reference.Depth != 2 {
		t.Errorf("station %+v", c.Station[0])
	}
}

func TestExample(t *testing.T) {
	c, err := Load(filepath.Join("..", "deploy", "unsheard.example.toml"))
	if err != nil {
		t.Fatal(err)
	}
	want, err := Parse([]byte(strings.NewReplacer(
		`"c"`, `"harbour-07"`, `"a"`, `"bay-a"`, `"b"`, `'bundles\bay-a'`,
		`"s"`, `'D:\drop\streak'`, `"r"`, `'D:\drop\reference'`).Replace(
		strings.Replace(strings.Replace(least, `"tag"`, `"S_%Y%m%dT%H%M%S.%f.tif"`, 1),
			`"tag"`, `"R_%Y%m%dT%H%M%S.%f.tif"`, 1))), filepath.Join("..", "deploy", "x.toml"))
	if err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(c, want) {
		t.Errorf("the example is\n%+v\nits required keys with defaults are\n%+v", c, want)
	}
}

// TestExampleShowsEveryKey keeps the example complete: each commented
// default, made active, is accepted and changes nothing.
func TestExampleShowsEveryKey(t *testing.T) {
	path := filepath.Join("..", "deploy", "unsheard.example.toml")
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	text := string(data)
	for _, key := range []string{"clock", "quiet", "rescan", "depth", "timeout", "attempts", "stop", "quick", "coarse",
		"keep_free", "file", "level", "max_size", "keep"} {
		if !strings.Contains(text, "\n# "+key+" = ") {
			t.Errorf("the example does not show %s", key)
		}
		text = strings.ReplaceAll(text, "\n# "+key+" = ", "\n"+key+" = ")
	}
	got, err := Parse([]byte(text), path)
	if err != nil {
		t.Fatal(err)
	}
	want, err := Load(path)
	if err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("a shown default differs from the real one:\n%+v\n%+v", got, want)
	}
}

func TestRoundTrip(t *testing.T) {
	again(t, []byte(least))
}

// again marshals what it parsed, parses that and compares.
func again(t *testing.T, text []byte) {
	t.Helper()
	first, err := Parse(text, "unsheard.toml")
	if err != nil {
		return
	}
	written, err := toml.Marshal(first)
	if err != nil {
		t.Fatalf("marshal: %v", err)
	}
	second, err := Parse(written, "unsheard.toml")
	if err != nil {
		t.Fatalf("its own output is refused: %v\n%s", err, written)
	}
	if !reflect.DeepEqual(first, second) {
		t.Fatalf("not the same after a round trip:\n%+v\n%+v\n%s", first, second, written)
	}
}

func FuzzConfig(f *testing.F) {
	f.Add([]byte(least))
	example, err := os.ReadFile(filepath.Join("..", "deploy", "unsheard.example.toml"))
	if err != nil {
		f.Fatal(err)
	}
	f.Add(example)
	for _, m := range mistakes {
		f.Add([]byte(m.text))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		if len(text) > 1<<14 {
			return
		}
		again(t, text)
	})
}

func TestUnreadable(t *testing.T) {
	dir := t.TempDir()
	big := filepath.Join(dir, "big.toml")
	if err := os.WriteFile(big, make([]byte, MaxSize+1), 0o600); err != nil {
		t.Fatal(err)
	}
	for path, want := range map[string]string{
		filepath.Join(dir, "none.toml"): "none.toml",
		dir:                             "it is a folder: name the file inside it",
		big:                             "this is not a configuration file",
	} {
		if _, err := Load(path); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: got %v, want %q in it", path, err, want)
		}
	}
}

func TestByteOrderMark(t *testing.T) {
	if _, err := Parse([]byte("\xef\xbb\xbf"+least), "u.toml"); err != nil {
		t.Error(err)
	}
}
