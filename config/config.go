package config

import "time"

// Config is the whole file. The tag "example" is what an error message
// shows as a correct value.
type Config struct {
	Campaign Campaign  `toml:"campaign"`
	Station  []Station `toml:"station"`
	Work     Work      `toml:"work"`
	Results  Results   `toml:"results"`
	Disk     Disk      `toml:"disk"`
	Page     Page      `toml:"page"`
	Log      Log       `toml:"log"`
}

// Campaign names the measuring campaign.
type Campaign struct {
	// Name appears on the page, in the table and in every result. Required.
	Name string `toml:"name" example:"\"harbour-07\""`

	// State is the folder of the ledger and the queue. It must be on a
	// local disk: a network share is refused. Default "state".
	State string `toml:"state" example:"'C:\\unsheard\\state'"`
}

// Station is one streak camera and one reference camera looking at one
// scene.
type Station struct {
	// Name is used in paths, pages and metric labels: lower-case letters,
	// digits and hyphens. Required, unique.
	Name string `toml:"name" example:"\"bay-a\""`

	// Bundle is a calibration bundle, or a folder of bundles of which the
	// newest valid one is used. Required.
	Bundle string `toml:"bundle" example:"\"bundles/bay-a\""`

	Streak    Arm  `toml:"streak"`
	Reference Arm  `toml:"reference"`
	Pair      Pair `toml:"pair"`
}

// Arm is the drop folder of one camera.
type Arm struct {
	// Folder is where the camera's computer drops its frames. Required.
	Folder string `toml:"folder" example:"'D:\\drop\\streak'"`

	// Stamp says where a frame's time is found: a strptime pattern for the
	// file name ({shot} reads a shot number), or "tag", "sidecar" or
	// "mtime". Required.
	Stamp string `toml:"stamp" example:"\"S_%Y%m%dT%H%M%S.%f.tif\""`

	// Clock is the IANA time zone of times written without one, or "Local"
	// for the zone of this computer. Default "UTC".
	Clock string `toml:"clock" example:"\"Europe/Berlin\""`

	// Quiet is how long a file's size and modification time must stay
	// unchanged before it counts as whole. Default 1s.
	Quiet Duration `toml:"quiet" example:"\"1s\""`

	// Rescan is the interval between two full looks at the folder. Default
	// 10s.
	Rescan Duration `toml:"rescan" example:"\"10s\""`

	// Depth is how many levels of sub-folders are watched. Default 2; 0
	// watches the folder alone.
	Depth int `toml:"depth" example:"2"`
}

// Location is the time zone named by Clock. It is UTC if Clock is not a
// zone, which Validate refuses.
func (a Arm) Location() *time.Location {
	loc, err := time.LoadLocation(a.Clock)
	if err != nil {
		return time.UTC
	}
	return loc
}

// Pair says when two frames belong to the same shot.
type Pair struct {
	// Within is the largest difference between the two frames' times.
	// Default 5ms.
	Within Duration `toml:"within" example:"\"5ms\""`

	// Grace is how long a frame waits for its partner. Default 20s.
	Grace Duration `toml:"grace" example:"\"20s\""`
}

// Work limits what reconstruction may use.
type Work struct {
	// Slots is the number of shots worked on at a time. Default 0: from
	// the cores and the memory of this computer.
	Slots int `toml:"slots" example:"2"`

	// Memory is what all slots together may use, as a share of this
	// computer's memory or as a size. Default "70%".
	Memory Percent `toml:"memory" example:"\"70%\""`

	// Timeout ends an attempt that takes longer. Default 10m.
	Timeout Duration `toml:"timeout" example:"\"10m\""`

	// Attempts is how often a failing shot is tried before it is
	// quarantined. Default 4.
	Attempts int `toml:"attempts" example:"4"`

	// Stop is how long running attempts may go on when the service is
	// asked to stop. Default 30s; "0s" interrupts them at once.
	Stop Duration `toml:"stop" example:"\"30s\""`

	// Quick says whether a quick look comes before the full cube. Default
	// true.
	Quick bool `toml:"quick" example:"true"`

	// Coarse is how many window pixels the quick look takes together along
	// each side. Default 2.
	Coarse int `toml:"coarse" example:"2"`
}

// Results says where result folders go.
type Results struct {
	// Beside puts them beside the frame of this arm: "streak" or
	// "reference". Default "streak", unless Folder is given.
	Beside string `toml:"beside" example:"\"streak\""`

	// Folder puts them there instead. Default "": use Beside.
	Folder string `toml:"folder" example:"'D:\\cubes'"`

	// Mirror is reserved for a second place and must be empty.
	Mirror string `toml:"mirror" example:"''"`

	// Formats lists the cube formats to write. Default ["nexus"].
	Formats []string `toml:"formats" example:"[\"nexus\"]"`
}

// Disk guards against a full disk.
type Disk struct {
	// KeepFree is what must stay free; below it no new shot is started.
	// Default "2GB"; "0B" switches the guard off.
	KeepFree Size `toml:"keep_free" example:"\"2GB\""`
}

// Page is the status page.
type Page struct {
	// Listen is its address, host and port. Default "127.0.0.1:8787".
	Listen string `toml:"listen" example:"\"127.0.0.1:8787\""`
}

// Log is the service's own log.
type Log struct {
	// File is the log file. Default "": unsheard.log in the state folder,
	// which is what a loaded Config then holds.
	File string `toml:"file" example:"'C:\\unsheard\\unsheard.log'"`

	// Level is the least severity written: "debug", "info", "warn" or
	// "error". Default "info".
	Level string `toml:"level" example:"\"info\""`

	// MaxSize is the size at which a new log file is begun. Default "20MB".
	MaxSize Size `toml:"max_size" example:"\"20MB\""`

	// Keep is how many old log files are kept. Default 5; 0 keeps none.
	Keep int `toml:"keep" example:"5"`
}
