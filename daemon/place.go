package daemon

import (
	"path"
	"path/filepath"
	"strings"

	"unsheard/config"
)

// suffix ends the name of a result folder.
const suffix = ".shot"

// place says where the frames and the results of one station are. Paths in the
// ledger are relative to the drop folders, with forward slashes.
type place struct {
	streak, reference string // drop folders
	results           string // folder of the result folders
	root              string // must exist before anything is made in results
	beside            string // arm the results lie beside, or ""
}

func newPlace(c *config.Config, s *config.Station) place {
	p := place{streak: s.Streak.Folder, reference: s.Reference.Folder}
	switch {
	case c.Results.Folder != "":
		p.results, p.root = filepath.Join(c.Results.Folder, s.Name), c.Results.Folder
	case c.Results.Beside == "reference":
		p.results, p.root, p.beside = p.reference, p.reference, "reference"
	default:
		p.results, p.root, p.beside = p.streak, p.streak, "streak"
	}
	return p
}

// result returns the result folder of a shot: named after the streak frame, or
// after the reference frame where results lie beside that one.
func (p place) result(streak, reference string) string {
	rel := streak
	if p.beside == "reference" {
		rel = reference
	}
	return filepath.Join(p.results, filepath.FromSlash(stem(rel))+suffix)
}

func (p place) streakFile(rel string) string { return filepath.Join(p.streak, filepath.FromSlash(rel)) }
func (p place) referenceFile(rel string) string {
	return filepath.Join(p.reference, filepath.FromSlash(rel))
}

// stem is a path without the ending of its last element.
func stem(rel string) string { return strings.TrimSuffix(rel, path.Ext(rel)) }
