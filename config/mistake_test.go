package config

import (
	"errors"
	"strings"
	"testing"
)

// change replaces old by new in the least configuration.
func change(old, new string) string {
	if !strings.Contains(least, old) {
		panic("not in the least configuration: " + old)
	}
	return strings.Replace(least, old, new, 1)
}

var mistakes = []struct{ name, text, want string }{
	{"unknown key", change(`folder = "s"`, `foldr = "s"`),
		`u.toml:7:1: unknown key "foldr" in [station.streak]: did you mean "folder"?`},
	{"capital", change(`folder = "s"`, `Folder = "s"`),
		`u.toml:7:1: unknown key "Folder" in [station.streak]: did you mean "folder"?`},
	{"key of another table", least + "[work]\nlisten = \"x\"\n",
		`u.toml:13:1: unknown key "listen" in [work]: it belongs in [page]`},
	{"unknown table", least + "[pages]\nlisten = \"x\"\n",
		`u.toml:12:2: unknown key "pages": did you mean "page"?`},
	{"nothing like it", least + "[work]\nzzzzzzzz = 1\n",
		`u.toml:13:1: unknown key "zzzzzzzz" in [work]: known here: slots, memory, timeout, attempts, stop, quick, coarse`},
	{"single brackets", change("[[station]]", "[station]"),
		`u.toml:3:2: [station] in single brackets: there can be several, so write [[station]]`},
	{"double brackets", least + "[[work]]\nslots = 1\n",
		`u.toml:12:3: [[work]] in double brackets: there is only one, so write [work]`},
	{"before any station", "[station.streak]\nfolder = 's'\n",
		`u.toml:1:2: [station.streak] comes before any [[station]]: begin with [[station]] and put this below it`},
	{"text for number", least + "[work]\nslots = \"four\"\n",
		`u.toml:13:1: slots is text: write a whole number, for example slots = 2`},
	{"number for time", least + "[station.pair]\nwithin = 5\n",
		`u.toml:13:1: within is a whole number: write text in quotes, for example within = "5ms"`},
	{"no unit", least + "[station.pair]\nwithin = \"5\"\n",
		`u.toml:13:1: within = "5": a time needs a unit (ns, us, ms, s, m, h): write for example within = "5ms"`},
	{"strange unit", least + "[disk]\nkeep_free = \"2 gigs\"\n",
		`u.toml:13:1: keep_free = "2 gigs": unknown unit "gigs" (known: B, KB, MB, GB, TB, KiB, MiB, GiB, TiB): write for example keep_free = "2GB"`},
	{"bare memory", least + "[work]\nmemory = \"70\"\n",
		`u.toml:13:1: memory = "70": a number alone could be a share or a size: add "%" or a unit: write for example memory = "70%"`},
	{"fraction for number", least + "[work]\nattempts = 1.5\n",
		`u.toml:13:1: attempts is a number with a decimal point: write a whole number, for example attempts = 4`},
	{"text for list", least + "[results]\nformats = \"nexus\"\n",
		`u.toml:13:1: formats is text: write a list in square brackets, for example formats = ["nexus"]`},
	{"numbers in list", least + "[results]\nformats = [1]\n",
		`u.toml:13:1: formats holds a whole number: write a list in square brackets, for example formats = ["nexus"]`},
	{"value for table", "work = 3\n" + least,
		`u.toml:1:1: work is a whole number: write a table, begin it with [work]`},
	{"dotted through a value", least + "[work]\nslots.x = 3\n",
		`u.toml:13:1: slots is used as a table: write a whole number, for example slots = 2`},
	{"twice", change(`folder = "s"`, "folder = \"s\"\nfolder = \"t\""),
		`u.toml:8:1: key folder is already defined: keep one of the two`},
	{"windows path, bad escape", change(`folder = "s"`, `folder = "D:\drop\streak"`),
		`u.toml:7:13: invalid escape character U+0064 'd': in double quotes a backslash begins an escape: write Windows paths in single quotes, like 'D:\drop\streak'`},
	{"windows path, unicode escape", change(`folder = "s"`, `folder = "D:\users\x"`),
		`u.toml:7:15: invalid hexadecimal digit in unicode escape sequence: in double quotes a backslash begins an escape: write Windows paths in single quotes, like 'D:\drop\streak'`},
	{"windows path, ends in backslash", change(`folder = "s"`, `folder = "D:\"`),
		`u.toml:7:15: basic strings cannot have new lines: in double quotes a backslash begins an escape: write Windows paths in single quotes, like 'D:\drop\streak'`},
	{"windows path, tab", change(`folder = "s"`, `folder = "D:\temp"`),
		`u.toml:7:1: folder = "D:\temp" holds a tab, which "\t" in double quotes stands for: write Windows paths in single quotes, like 'D:\drop\streak'`},
	{"share, half escaped", change(`folder = "s"`, `folder = "\\server\\drop"`),
		`u.toml:7:1: folder = '\server\drop' begins with a single backslash: write the full path, like 'D:\drop\streak' or '\\server\share\streak'`},
	{"drive only", change(`folder = "s"`, `folder = 'D:drop'`),
		`u.toml:7:1: folder = 'D:drop' names a drive but no folder from its root: write the full path, like 'D:\drop\streak' or '\\server\share\streak'`},
	{"home", change(`folder = "s"`, `folder = '~/drop'`),
		`u.toml:7:1: folder = '~/drop' begins with "~", which is not expanded: write the full path, like 'D:\drop\streak' or '\\server\share\streak'`},
	{"not quoted", change(`name = "a"`, `name = a`),
		`u.toml:4:8: unexpected character U+0061 'a' at start of value: write text in quotes, like name = "bay-a"`},
	{"no value", change(`name = "a"`, `name =`),
		`u.toml:4:7: no value after =: write text in quotes, like name = "bay-a"`},
	{"open bracket", change(`[station.streak]`, `[station.streak`),
		`u.toml:6:16: expected ']' to close table name: close the brackets, like [work] or [[station]]`},
	{"after other letters", change("[campaign]\nname = \"c\"", "campaign = { name = \"µµ\", stat = 1 }"),
		`u.toml:1:27: unknown key "stat" in [campaign]: did you mean "state"?`},
	{"utf-16", "\xff\xfe[\x00",
		`u.toml:1:1: the file is in UTF-16: save it as UTF-8`},
	{"empty", "",
		`u.toml:1:1: the campaign has no name: write name = "harbour-07" below [campaign]
u.toml:1:1: no station: add a [[station]] with its streak and reference folders`},
	{"no station", "[campaign]\nname = \"c\"\n",
		`u.toml:1:1: no station: add a [[station]] with its streak and reference folders`},
	{"station name", change(`name = "a"`, `name = "Bay A"`),
		`u.toml:4:1: station name "Bay A": use at most 40 lower-case letters a-z, digits and hyphens, not first or last a hyphen`},
	{"device name", change(`name = "a"`, `name = "con"`),
		`u.toml:4:1: station name "con" cannot be a folder on Windows: choose another name`},
	{"twice the station", least + least[strings.Index(least, "[[station]]"):],
		`u.toml:13:1: station name "a" is used twice: give every station a name of its own
u.toml:16:1: streak of "a" and streak of "a" watch the same files with the same stamp: give each arm its own folder, or stamps that tell their files apart
u.toml:19:1: reference of "a" and reference of "a" watch the same files with the same stamp: give each arm its own folder, or stamps that tell their files apart`},
	{"same files", change(`folder = "r"`, `folder = "s"`),
		`u.toml:10:1: streak of "a" and reference of "a" watch the same files with the same stamp: give each arm its own folder, or stamps that tell their files apart`},
	{"nested files", change(`folder = "r"`, `folder = "s/x/y"`),
		`u.toml:10:1: streak of "a" and reference of "a" watch the same files with the same stamp: give each arm its own folder, or stamps that tell their files apart`},
	{"empty stamp", change(`stamp = "tag"`, `stamp = ""`),
		`u.toml:8:1: stamp is missing, so frames have no time: write a pattern like stamp = "S_%Y%m%dT%H%M%S.%f.tif", or "tag", "sidecar" or "mtime"`},
	{"no folder", change(`folder = "s"`, ``),
		`u.toml:6:10: folder is missing: write for example folder = 'D:\drop\streak'`},
	{"clock", change(`stamp = "tag"`, "stamp = \"tag\"\nclock = \"Mars/Base\""),
		`u.toml:9:1: clock = "Mars/Base" is not a time zone: write an IANA name like "UTC" or "Europe/Berlin", or "Local"`},
	{"within", least + "[station.pair]\nwithin = \"0s\"\ngrace = \"-1s\"\n",
		`u.toml:13:1: within = "0s" is not above zero: write a time up to 1h0m0s
u.toml:14:1: grace = "-1s" is not above zero: write a time up to 24h0m0s`},
	{"memory", least + "[work]\nmemory = \"120%\"\n",
		`u.toml:13:1: memory = "120%": write 5% to 95% of this computer's memory`},
	{"little memory", least + "[work]\nmemory = \"1MB\"\n",
		`u.toml:13:1: memory = "1MB" is too little for one shot: write at least 256MB`},
	{"listen", least + "[page]\nlisten = \"8787\"\n",
		`u.toml:13:1: listen = "8787" is not host:port: write for example "127.0.0.1:8787"`},
	{"beside and folder", least + "[results]\nbeside = \"streak\"\nfolder = \"x\"\n",
		`u.toml:14:1: results go beside the frames and into a folder: keep either beside or folder`},
	{"beside what", least + "[results]\nbeside = \"left\"\n",
		`u.toml:13:1: beside: unknown value "left": known: streak, reference`},
	{"mirror", least + "[results]\nmirror = '\\\\share\\cubes'\n",
		`u.toml:13:1: mirror: not available in this version; leave it out`},
	{"format", least + "[results]\nformats = [\"nexus\", \"zarr\", \"nexus\"]\n",
		`u.toml:13:1: formats: unknown value "zarr": known: nexus
u.toml:13:1: format "nexus" is listed twice: keep one of the two`},
	{"state on a share", change(`name = "c"`, "name = \"c\"\nstate = '\\\\nas\\state'"),
		`u.toml:3:1: state = '\\nas\state' is on a network share: choose a folder on a local disk, like 'C:\unsheard\state'`},
	{"level", least + "[log]\nlevel = \"loud\"\n",
		`u.toml:13:1: level: unknown value "loud": known: debug, info, warn, error`},
	{"several at once", least + "[work]\nslots = -1\nattempts = 0\n[log]\nkeep = -2\n",
		`u.toml:13:1: slots = -1 is out of range: write a whole number from 0 to 256
u.toml:14:1: attempts = 0 is out of range: write a whole number from 1 to 20
u.toml:16:1: keep = -2 is out of range: write a whole number from 0 to 1000`},
}

func TestMistakes(t *testing.T) {
	for _, c := range mistakes {
		t.Run(c.name, func(t *testing.T) {
			_, err := Parse([]byte(c.text), "u.toml")
			if err == nil {
				t.Fatal("accepted")
			}
			if got := err.Error(); got != c.want {
				t.Errorf("got\n%s\nwant\n%s", got, c.want)
			}
			var m *Mistake
			if !errors.As(err, &m) || m.Line < 1 || m.Column < 1 {
				t.Errorf("no place: %v", err)
			}
		})
	}
}

func TestNotFromFile(t *testing.T) {
	c, err := Parse([]byte(least), "u.toml")
	if err != nil {
		t.Fatal(err)
	}
	c.Station[0].Pair.Within = 0
	c.Page.Listen = ""
	want := `station[0].pair.within: within = "0s" is not above zero: write a time up to 1h0m0s
page.listen: listen = "" is not host:port: write for example "127.0.0.1:8787"`
	if got := c.Validate().Error(); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
}
