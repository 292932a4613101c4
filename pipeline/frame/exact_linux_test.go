package frame

import (
	"fmt"
	"os"
	"os/exec"
	"testing"
)

// python is Debian's, which sees Debian's modules.
const python = "/usr/bin/python3"

// script runs a script of testdata and fails the test if it fails.
func script(t *testing.T, arg ...string) string {
	t.Helper()
	if _, err := os.Stat(python); err != nil {
		t.Fatal("apt install python3-tifffile python3-astropy python3-numpy python3-pil libtiff-tools")
	}
	out, err := exec.Command(python, arg...).CombinedOutput()
	if err != nil {
		t.Fatalf("%v: %v\n%s\nneeded: apt install python3-tifffile python3-astropy python3-numpy python3-pil libtiff-tools",
			arg, err, out)
	}
	return string(out)
}

// TestExact reads files that general-purpose tools write now, in sides that
// tiles and strips divide and do not.
func TestExact(t *testing.T) {
	sides := [][2]int{{9, 17}, {1, 1}, {64, 32}, {37, 70}}
	if testing.Short() {
		sides = sides[:1]
	}
	for i, s := range sides {
		t.Run(fmt.Sprintf("%d×%d", s[1], s[0]), func(t *testing.T) {
			dir := t.TempDir()
			script(t, "testdata/make.py", dir, fmt.Sprint(s[0]), fmt.Sprint(s[1]), fmt.Sprint(i+1))
			checkFiles(t, dir)
		})
	}
}
