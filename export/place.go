package export

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"strings"
)

// checkPlace refuses a place where anything but a result folder stands, or
// inside which a raw frame lies, and returns the absolute path.
func checkPlace(dir string, from origin) (string, error) {
	bad := func(format string, args ...any) (string, error) {
		return dir, fmt.Errorf("%w: "+format, append([]any{ErrPlace}, args...)...)
	}
	abs, err := filepath.Abs(dir)
	if err != nil {
		return dir, err
	}
	base := filepath.Base(abs)
	if why := badName(base, runtime.GOOS); why != "" {
		return bad("%s", why)
	}
	for _, raw := range []string{from.Streak.Path, from.Reference.Path} {
		if raw != "" && inside(raw, abs) {
			return bad("the raw frame %s lies there; choose another folder", raw)
		}
	}
	st, err := os.Lstat(abs)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return abs, nil
	case err != nil:
		return dir, err
	case !st.IsDir():
		return bad("it is a file or a link, not a folder; move it away")
	}
	list, err := os.ReadDir(abs)
	if err != nil {
		return dir, err
	}
	for _, e := range list {
		if e.Name() == fileMetrics || e.Name() == fileCube {
			return abs, nil
		}
	}
	if len(list) > 0 {
		return bad("the folder holds other files and no result; choose another or empty it")
	}
	return abs, nil
}

// maxName leaves room for the hidden names within the usual 255 bytes.
const maxName = 200

// badName says what is wrong with a folder's name, if anything.
func badName(base, system string) string {
	switch {
	case base == "." || base == ".." || base == "" || strings.ContainsAny(base, `/`) || base == string(filepath.Separator):
		return "not the name of a folder"
	case len(base) > maxName:
		return fmt.Sprintf("its name is longer than %d bytes", maxName)
	case strings.HasPrefix(base, "."):
		return "names with a leading dot are for unfinished results"
	}
	if system != "windows" {
		return ""
	}
	stem, _, _ := strings.Cut(strings.ToUpper(base), ".")
	switch strings.TrimRight(stem, " ") {
	case "CON", "PRN", "AUX", "NUL", "COM1", "COM2", "COM3", "COM4", "COM5", "COM6", "COM7", "COM8", "COM9",
		"LPT1", "LPT2", "LPT3", "LPT4", "LPT5", "LPT6", "LPT7", "LPT8", "LPT9":
		return "Windows keeps that name for a device"
	}
	if strings.ContainsAny(base, `<>:"|?*\`) || strings.HasSuffix(base, " ") || strings.HasSuffix(base, ".") {
		return "Windows does not allow that name"
	}
	return ""
}

// inside reports whether path is dir or lies below it, links resolved.
func inside(path, dir string) bool {
	real := func(p string) string {
		if abs, err := filepath.Abs(p); err == nil {
			p = abs
		}
		if r, err := filepath.EvalSymlinks(p); err == nil {
			p = r
		}
		return p
	}
	rel, err := filepath.Rel(real(dir), real(path))
	return err == nil && rel != ".." && !strings.HasPrefix(rel, ".."+string(filepath.Separator))
}
