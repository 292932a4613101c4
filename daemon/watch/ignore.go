package watch

import (
	"path"
	"path/filepath"
	"strings"
)

// temporary are the ends of names under which programs write before they
// rename. Common practice, no source.
var temporary = []string{".tmp", ".temp", ".part", ".partial", ".filepart", ".crdownload", ".download", ".swp", ".lock", "~"}

// ignored says whether a file or folder of this name is never looked at.
func ignored(name string) bool {
	if name == "" || strings.ContainsRune(".~$", rune(name[0])) {
		return true
	}
	low := strings.ToLower(name)
	if strings.HasSuffix(low, ".shot") {
		return true
	}
	for _, end := range temporary {
		if strings.HasSuffix(low, end) {
			return true
		}
	}
	return false
}

// hidden says whether any part of a path below the folder is ignored.
func hidden(rel string) bool {
	for part := range strings.SplitSeq(rel, "/") {
		if ignored(part) {
			return true
		}
	}
	return false
}

// level is how many sub-folders a path below the folder goes through.
func level(rel string) int { return strings.Count(rel, "/") }

// below joins a folder and a name in it.
func below(dir, name string) string { return path.Join(dir, name) }

// path is the full path of a file below the folder.
func (w *Watcher) path(rel string) string {
	return filepath.Join(w.o.Folder, filepath.FromSlash(rel))
}
