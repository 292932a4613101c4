package export

import (
	"fmt"
	"os"
	"path/filepath"
	"sort"

	"unsheard/export/nexus"
)

// Verify re-reads a result folder and returns what is wrong with it, one line
// a fault, in order of file name: files that miss or differ from the size and
// checksum in metrics.json, and a cube that cannot be read back. The error is
// for a folder that cannot be judged at all.
func Verify(dir string) (faults []string, err error) {
	d, err := readDocument(dir)
	if err != nil {
		return nil, err
	}
	names := make([]string, 0, len(d.Files))
	for name := range d.Files {
		names = append(names, name)
	}
	sort.Strings(names)
	for _, name := range names {
		if filepath.Base(name) != name {
			faults = append(faults, fmt.Sprintf("%q: no file name", name))
			continue
		}
		got, err := sum(filepath.Join(dir, name))
		switch want := d.Files[name]; {
		case os.IsNotExist(err):
			faults = append(faults, name+": missing")
		case err != nil:
			faults = append(faults, fmt.Sprintf("%s: %v", name, err))
		case got.Bytes != want.Bytes:
			faults = append(faults, fmt.Sprintf("%s: %d bytes, was published with %d", name, got.Bytes, want.Bytes))
		case got != want:
			faults = append(faults, name+": content changed since it was published")
		}
	}
	if err := readCube(filepath.Join(dir, fileCube)); err != nil {
		faults = append(faults, fmt.Sprintf("%s: %v", fileCube, err))
	}
	return faults, nil
}

// readCube reads every frame.
func readCube(path string) error {
	f, err := nexus.Open(path)
	if err != nil {
		return err
	}
	defer f.Close()
	const name = "entry/data/counts"
	shape, err := f.Shape(name)
	if err != nil {
		return err
	}
	if len(shape) != 3 {
		return fmt.Errorf("%s has %d dimensions, want 3", name, len(shape))
	}
	// As many frames at a time as a chunk is deep, so each is read once.
	const depth = 32
	for k := 0; k < shape[0]; k += depth {
		n := min(depth, shape[0]-k)
		if _, err := f.Region(name, []int{k, 0, 0}, []int{n, shape[1], shape[2]}); err != nil {
			return err
		}
	}
	return nil
}
