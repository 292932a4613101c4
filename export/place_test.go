package export

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// TestPlace: nothing but a result folder is ever replaced.
func TestPlace(t *testing.T) {
	top := t.TempDir()
	file := filepath.Join(top, "S_1.tif")
	other := filepath.Join(top, "photos")
	taken := filepath.Join(top, "taken.shot")
	link := filepath.Join(top, "link.shot")
	empty := filepath.Join(top, "empty")
	r := pulse(3, 3, 3, "full", "a")
	publishTo(t, taken, r, Options{parts: bare})
	for _, err := range []error{os.WriteFile(file, []byte("raw"), 0o666), os.MkdirAll(filepath.Join(other, "x"), 0o777),
		os.Symlink(taken, link), os.Mkdir(empty, 0o777), os.WriteFile(filepath.Join(taken, "S_2.tif"), []byte("raw"), 0o666)} {
		if err != nil {
			t.Fatal(err)
		}
	}
	r.Provenance = json.RawMessage(fmt.Sprintf(`{"taken":"noon","started":7,"streak":{"path":%q}}`, filepath.Join(taken, "S_2.tif")))
	for _, dir := range []string{file, other, taken, link, "/", filepath.Join(top, ".hidden"), filepath.Join(top, strings.Repeat("x", 220))} {
		if err := Publish(context.Background(), dir, r, Options{parts: bare}); !errors.Is(err, ErrPlace) || Retryable(err) {
			t.Errorf("%s: %v", dir, err)
		}
	}
	for _, p := range []string{file, filepath.Join(taken, "S_2.tif")} {
		if b, err := os.ReadFile(p); err != nil || string(b) != "raw" {
			t.Errorf("%s: %q %v", p, b, err)
		}
	}
	publishTo(t, empty, pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	whole(t, empty)
	err := Publish(context.Background(), filepath.Join(top, "no", "a.shot"), pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	if !errors.Is(err, fs.ErrNotExist) || !Retryable(err) {
		t.Errorf("missing parent: %v", err)
	}
}

func TestBadName(t *testing.T) {
	for _, c := range []struct {
		base, system string
		ok           bool
	}{{"S_1.shot", "windows", true}, {"aux.tif.shot", "windows", false}, {"a:b.shot", "windows", false}, {"nul", "windows", false},
		{"a ", "windows", false}, {"aux.shot", "linux", true}, {"..", "linux", false}, {"console.shot", "windows", true}} {
		if got := badName(c.base, c.system); (got == "") != c.ok {
			t.Errorf("%q on %s: %q", c.base, c.system, got)
		}
	}
}

// TestReadOnly: a folder that cannot be written to is an error of the system,
// and nothing changes. Root may write everywhere: there only the disk's own
// refusal is tried.
func TestReadOnly(t *testing.T) {
	top := t.TempDir()
	dir := filepath.Join(top, "a.shot")
	publishTo(t, dir, pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	denied := &disk{mkdir: func(p string) error { return &fs.PathError{Op: "mkdir", Path: p, Err: syscall.EROFS} },
		create: realDisk.create, rename: realDisk.rename, removeAll: realDisk.removeAll, syncDir: realDisk.syncDir}
	err := Publish(context.Background(), dir, pulse(3, 3, 3, "full", "b"), Options{parts: bare, disk: denied})
	if !errors.Is(err, syscall.EROFS) || !Retryable(err) {
		t.Errorf("read-only disk: %v", err)
	}
	if os.Geteuid() > 0 {
		if err := os.Chmod(top, 0o555); err != nil {
			t.Fatal(err)
		}
		defer os.Chmod(top, 0o777)
		err := Publish(context.Background(), dir, pulse(3, 3, 3, "full", "b"), Options{parts: bare})
		if !errors.Is(err, fs.ErrPermission) || !Retryable(err) {
			t.Errorf("no permission: %v", err)
		}
	}
	if got := whole(t, dir); got.bundle != "a" || listing(t, top) != "a.shot" {
		t.Errorf("%v in place, %s beside", got, listing(t, top))
	}
}
