package calib

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/pelletier/go-toml/v2"
)

// located turns an error of the TOML reader into "line:col: what is wrong".
func located(err error) error {
	if err == nil {
		return nil
	}
	var strict *toml.StrictMissingError
	if errors.As(err, &strict) && len(strict.Errors) > 0 {
		e := strict.Errors[0]
		row, col := e.Position()
		return fmt.Errorf("%d:%d: unknown key %q: remove it or correct its spelling", row, col, strings.Join(e.Key(), "."))
	}
	var de *toml.DecodeError
	if errors.As(err, &de) {
		row, col := de.Position()
		hint := ""
		if strings.Contains(de.Error(), "escape") {
			hint = `: write Windows paths in single quotes, 'D:\folder\file.tif'`
		}
		return fmt.Errorf("%d:%d: %s%s", row, col, strings.TrimPrefix(de.Error(), "toml: "), hint)
	}
	return fmt.Errorf("1:1: %w", err)
}

// reader turns the text of a series into file names and keeps the first
// faults, each with its place.
type reader struct {
	path, folder, text string
	role               map[string]string // file -> table.key that named it
	err                error
	faults             int
}

// maxFaults bounds how many faults are listed at once.
const maxFaults = 10

func (r *reader) fail(table, key, what, remedy string) {
	if r.faults++; r.faults > maxFaults {
		return
	}
	row, col := place(r.text, table, key)
	name := key
	if table != "" {
		name = strings.TrimSpace("[" + table + "] " + key)
	}
	r.err = errors.Join(r.err, fmt.Errorf("%s:%d:%d: %s: %s: %s", r.path, row, col, name, what, remedy))
}

// place finds the line and column of a key of a table, or of the table's
// header, or the last line.
func place(text, table, key string) (row, col int) {
	lines := strings.Split(text, "\n")
	now, header := "", 0
	for i, l := range lines {
		t := strings.TrimSpace(l)
		if strings.HasPrefix(t, "[") && strings.Contains(t, "]") && !strings.Contains(t, "=") {
			now = strings.Trim(t[:strings.LastIndex(t, "]")+1], "[] ")
			if now == table {
				header = i + 1
			}
			continue
		}
		k, _, ok := strings.Cut(t, "=")
		if k = strings.TrimSpace(k); ok && key != "" && (now == table && k == key || now == "" && k == table+"."+key) {
			return i + 1, strings.Index(l, k) + 1
		}
	}
	if header > 0 {
		return header, 1
	}
	return max(len(lines), 1), 1
}

// need is files for a part without which there is no bundle.
func (r *reader) need(table, key string, patterns []string, remedy string) []string {
	if len(patterns) == 0 {
		r.fail(table, key, "names no files", remedy+", and list them here")
		return nil
	}
	return r.files(table, key, patterns)
}

// files expands patterns relative to the series file, with forward or back
// slashes, sorted within each pattern. A file has one role in a series.
func (r *reader) files(table, key string, patterns []string) (out []string) {
	for _, p := range patterns {
		if strings.TrimSpace(p) == "" {
			r.fail(table, key, "holds an empty file name", "remove it or write a file name")
			continue
		}
		found, err := r.expand(p)
		if err != nil {
			r.fail(table, key, fmt.Sprintf("%q: %v", p, err), "correct the pattern: * and ? stand for any characters, [a-z] for one of a set")
			continue
		}
		if len(found) == 0 {
			r.fail(table, key, fmt.Sprintf("no file matches %q in %q", p, r.folder), "copy the frames there or correct the name")
			continue
		}
		for _, f := range found {
			id := table + "." + key
			if was, taken := r.role[f]; taken {
				if was != id || key == "flat" || key == "delays" {
					r.fail(table, key, fmt.Sprintf("%q is also listed under %s", f, was), "give every frame file one place")
				}
				continue
			}
			r.role[f] = id
			out = append(out, f)
		}
	}
	return out
}

func (r *reader) expand(pattern string) ([]string, error) {
	p := filepath.FromSlash(strings.ReplaceAll(pattern, `\`, "/"))
	if !filepath.IsAbs(p) {
		p = filepath.Join(r.folder, p)
	}
	if _, err := os.Stat(p); err == nil { // a name that happens to hold [ or *
		return []string{p}, nil
	}
	found, err := filepath.Glob(p)
	slices.Sort(found)
	return found, err
}
