package config

import (
	"fmt"
	"net"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"
	_ "time/tzdata" // Windows has no IANA zones of its own
	"unicode"
)

// Known values of keys that take one of a few words.
var (
	Formats = []string{"nexus"}
	Levels  = []string{"debug", "info", "warn", "error"}
	arms    = []string{"streak", "reference"}
)

var (
	stationName = regexp.MustCompile(`^[a-z0-9]([a-z0-9-]{0,38}[a-z0-9])?$`)
	reserved    = regexp.MustCompile(`^(con|prn|aux|nul|com[0-9]|lpt[0-9])$`)
)

// Validate lists every mistake in a configuration made in code, joined. A
// loaded one has passed it already.
func (c *Config) Validate() error {
	l := &list{}
	c.check(l)
	return l.err()
}

func (c *Config) check(l *list) {
	c.checkCampaign(l)
	if len(c.Station) == 0 {
		l.add("station", "no station", "add a [[station]] with its streak and reference folders")
	}
	for i := range c.Station {
		path := fmt.Sprintf("station[%d]", i)
		c.checkName(l, path+".name", i)
		c.Station[i].check(l, path)
	}
	c.checkFolders(l)
	c.Work.check(l)
	c.Results.check(l)
	c.checkService(l)
}

func (c *Config) checkCampaign(l *list) {
	name := c.Campaign.Name
	switch {
	case strings.TrimSpace(name) == "":
		l.add("campaign.name", "the campaign has no name", `write name = "harbour-07" below [campaign]`)
	case len(name) > 100 || strings.ContainsFunc(name, unicode.IsControl):
		l.add("campaign.name", "the campaign's name is too long or holds control characters",
			"use at most 100 bytes in one line")
	}
	path(l, "campaign.state", c.Campaign.State, true)
	if isShare(c.Campaign.State) {
		l.add("campaign.state", fmt.Sprintf("state = '%s' is on a network share", c.Campaign.State),
			`choose a folder on a local disk, like 'C:\unsheard\state'`)
	}
}

func (c *Config) checkName(l *list, key string, i int) {
	name := c.Station[i].Name
	switch {
	case name == "":
		l.add(key, "the station has no name", `write name = "bay-a"`)
		return
	case !stationName.MatchString(name):
		l.add(key, fmt.Sprintf("station name %q", name),
			"use at most 40 lower-case letters a-z, digits and hyphens, not first or last a hyphen")
	case reserved.MatchString(name):
		l.add(key, fmt.Sprintf("station name %q cannot be a folder on Windows", name), "choose another name")
	}
	for j := range i {
		if c.Station[j].Name == name {
			l.add(key, fmt.Sprintf("station name %q is used twice", name), "give every station a name of its own")
			return
		}
	}
}

func (s *Station) check(l *list, at string) {
	path(l, at+".bundle", s.Bundle, true)
	s.Streak.check(l, at+".streak")
	s.Reference.check(l, at+".reference")
	span(l, at+".pair.within", s.Pair.Within, 1, Duration(time.Hour))
	span(l, at+".pair.grace", s.Pair.Grace, 1, Duration(24*time.Hour))
}

func (a *Arm) check(l *list, at string) {
	path(l, at+".folder", a.Folder, true)
	if strings.TrimSpace(a.Stamp) == "" {
		l.add(at+".stamp", "stamp is missing, so frames have no time",
			`write a pattern like stamp = "S_%Y%m%dT%H%M%S.%f.tif", or "tag", "sidecar" or "mtime"`)
	}
	if _, err := time.LoadLocation(a.Clock); err != nil || a.Clock == "" {
		l.add(at+".clock", fmt.Sprintf("clock = %q is not a time zone", a.Clock),
			`write an IANA name like "UTC" or "Europe/Berlin", or "Local"`)
	}
	span(l, at+".quiet", a.Quiet, 1, Duration(time.Hour))
	span(l, at+".rescan", a.Rescan, Duration(100*time.Millisecond), Duration(time.Hour))
	count(l, at+".depth", a.Depth, 0, 8)
}

// checkFolders refuses arms between which a file could not be told apart.
func (c *Config) checkFolders(l *list) {
	type arm struct {
		*Arm
		name string
	}
	var seen []arm
	for i := range c.Station {
		s := &c.Station[i]
		for j, a := range []*Arm{&s.Streak, &s.Reference} {
			if a.Folder == "" || a.Stamp == "" {
				continue
			}
			key := fmt.Sprintf("station[%d].%s.folder", i, arms[j])
			name := fmt.Sprintf("%s of %q", arms[j], s.Name)
			for _, b := range seen {
				if a.Stamp == b.Stamp && (reaches(a.Folder, b.Folder, a.Depth) || reaches(b.Folder, a.Folder, b.Depth)) {
					l.add(key, fmt.Sprintf("%s and %s watch the same files with the same stamp", b.name, name),
						"give each arm its own folder, or stamps that tell their files apart")
					break
				}
			}
			seen = append(seen, arm{a, name})
		}
	}
}

func (w *Work) check(l *list) {
	count(l, "work.slots", w.Slots, 0, 256)
	switch m := w.Memory; {
	case m.Of != 0 && (m.Of < 5 || m.Of > 95):
		l.add("work.memory", fmt.Sprintf("memory = %q", m), "write 5% to 95% of this computer's memory")
	case m.Of == 0 && m.Size < 256e6:
		l.add("work.memory", fmt.Sprintf("memory = %q is too little for one shot", m), "write at least 256MB")
	}
	span(l, "work.timeout", w.Timeout, Duration(time.Second), Duration(24*time.Hour))
	count(l, "work.attempts", w.Attempts, 1, 20)
	span(l, "work.stop", w.Stop, 0, Duration(time.Hour))
	count(l, "work.coarse", w.Coarse, 2, 16)
}

func (r *Results) check(l *list) {
	switch {
	case r.Beside != "" && r.Folder != "":
		l.add("results.folder", "results go beside the frames and into a folder", "keep either beside or folder")
	case r.Beside == "" && r.Folder == "":
		l.add("results.beside", "results have no place", `write beside = "streak", or folder`)
	case r.Folder == "":
		oneOf(l, "results.beside", r.Beside, arms)
	}
	path(l, "results.folder", r.Folder, false)
	if r.Mirror != "" {
		l.add("results.mirror", "mirror", "not available in this version; leave it out")
	}
	if len(r.Formats) == 0 {
		l.add("results.formats", "no format", `write formats = ["nexus"]`)
	}
	for i, f := range r.Formats {
		oneOf(l, "results.formats", f, Formats)
		if slices.Contains(r.Formats[:i], f) {
			l.add("results.formats", fmt.Sprintf("format %q is listed twice", f), "keep one of the two")
		}
	}
}

// checkService checks the parts around the work: disk, page and log.
func (c *Config) checkService(l *list) {
	if c.Disk.KeepFree < 0 {
		l.add("disk.keep_free", fmt.Sprintf("keep_free = %q", c.Disk.KeepFree), "write 0B or more")
	}
	host, port, err := net.SplitHostPort(c.Page.Listen)
	n, numeric := strconv.ParseUint(port, 10, 16)
	if err != nil || numeric != nil || n == 0 && port != "0" || strings.ContainsAny(host, " /\\") {
		l.add("page.listen", fmt.Sprintf("listen = %q is not host:port", c.Page.Listen), `write for example "127.0.0.1:8787"`)
	}
	path(l, "log.file", c.Log.File, false)
	oneOf(l, "log.level", c.Log.Level, Levels)
	if c.Log.MaxSize < 1e5 {
		l.add("log.max_size", fmt.Sprintf("max_size = %q", c.Log.MaxSize), "write at least 100KB")
	}
	count(l, "log.keep", c.Log.Keep, 0, 1000)
}
