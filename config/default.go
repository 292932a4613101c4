package config

import (
	"fmt"
	"path/filepath"
	"time"
)

// basis is a configuration with every default that does not depend on the
// file.
func basis() *Config {
	return &Config{
		Campaign: Campaign{State: "state"},
		Work: Work{
			Memory:   Percent{Of: 70},
			Timeout:  Duration(10 * time.Minute),
			Attempts: 4,
			Stop:     Duration(30 * time.Second),
			Quick:    true,
			Coarse:   2,
		},
		Disk: Disk{KeepFree: 2e9},
		Page: Page{Listen: "127.0.0.1:8787"},
		Log:  Log{Level: "info", MaxSize: 20e6, Keep: 5},
	}
}

// fill gives defaults to the keys that exist once per station, and to those
// that depend on others, where the file does not give them.
func (c *Config) fill(doc *document) {
	for i := range c.Station {
		s := &c.Station[i]
		path := fmt.Sprintf("station[%d]", i)
		s.Streak.fill(doc, path+".streak")
		s.Reference.fill(doc, path+".reference")
		def(doc, path+".pair.within", &s.Pair.Within, Duration(5*time.Millisecond))
		def(doc, path+".pair.grace", &s.Pair.Grace, Duration(20*time.Second))
	}
	if c.Results.Folder == "" {
		def(doc, "results.beside", &c.Results.Beside, "streak")
	}
	def(doc, "results.formats", &c.Results.Formats, []string{"nexus"})
}

func (a *Arm) fill(doc *document, path string) {
	def(doc, path+".clock", &a.Clock, "UTC")
	def(doc, path+".quiet", &a.Quiet, Duration(time.Second))
	def(doc, path+".rescan", &a.Rescan, Duration(10*time.Second))
	def(doc, path+".depth", &a.Depth, 2)
}

func def[T any](doc *document, path string, dst *T, value T) {
	if !doc.has(path) {
		*dst = value
	}
}

// settle fills what follows from other, checked values.
func (c *Config) settle() {
	if c.Log.File == "" {
		c.Log.File = filepath.Join(c.Campaign.State, "unsheard.log")
	}
}
