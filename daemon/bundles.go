package daemon

import (
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"time"

	"unsheard/pipeline/calib"
)

// bundles remembers what the service must know of a station's bundles: loading
// one reads and hashes all its arrays, so it is done once per version.
type bundles struct {
	mu    sync.Mutex // guards known
	known map[string]bundleInfo
}

// bundleInfo is the part of a bundle the service needs.
type bundleInfo struct {
	Dir, ID    string
	T, H, W    int // cube
	Pixels     int // of both sensors
	ValidUntil time.Time
	mod        time.Time // of bundle.toml when it was read
}

func newBundles() *bundles { return &bundles{known: map[string]bundleInfo{}} }

// at returns the bundle of folder dir that is valid at time t.
func (b *bundles) at(dir string, t time.Time) (bundleInfo, error) {
	found, err := calib.Find(dir, t)
	if err != nil {
		return bundleInfo{}, err
	}
	return b.info(found)
}

func (b *bundles) info(dir string) (bundleInfo, error) {
	st, err := os.Stat(filepath.Join(dir, "bundle.toml"))
	if err != nil {
		return bundleInfo{}, fmt.Errorf("bundle: %w", err)
	}
	b.mu.Lock()
	k, ok := b.known[dir]
	b.mu.Unlock()
	if ok && k.mod.Equal(st.ModTime()) {
		return k, nil
	}
	c, err := calib.Load(dir)
	if err != nil {
		return bundleInfo{}, err
	}
	k = bundleInfo{Dir: dir, ID: c.ID, T: c.Frames, H: c.Window.H, W: c.Window.W,
		Pixels: c.Streak.W*c.Streak.H + c.Reference.W*c.Reference.H, ValidUntil: c.ValidUntil, mod: st.ModTime()}
	b.mu.Lock()
	b.known[dir] = k
	b.mu.Unlock()
	return k, nil
}

// byID returns the bundle with an ID: dir itself or one of its sub-folders.
func (b *bundles) byID(dir, id string) (bundleInfo, error) {
	candidates := []string{dir}
	if entries, err := os.ReadDir(dir); err == nil {
		for _, e := range entries {
			if e.IsDir() {
				candidates = append(candidates, filepath.Join(dir, e.Name()))
			}
		}
	}
	for _, c := range candidates {
		if k, err := b.info(c); err == nil && k.ID == id {
			return k, nil
		}
	}
	return bundleInfo{}, fmt.Errorf("bundle %.12s is not in %q any more: put it back, or redo the shot under another one", id, dir)
}
