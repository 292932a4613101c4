package row

import (
	"bytes"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
)

// TestGenerated runs the generator, a module of its own, and compares with
// what is committed.
func TestGenerated(t *testing.T) {
	if testing.Short() {
		t.Skip("builds the generator")
	}
	dir := t.TempDir()
	asm, stubs := filepath.Join(dir, "row_amd64.s"), filepath.Join(dir, "row_amd64.go")
	c := exec.Command("go", "run", ".", "-out", asm, "-stubs", stubs, "-pkg", "row")
	c.Dir = "../rowgen"
	c.Env = append(os.Environ(), "GOWORK=off", "GOOS=", "GOARCH=")
	if out, err := c.CombinedOutput(); err != nil {
		t.Fatalf("run the generator: %v\n%s", err, out)
	}
	for _, name := range []string{asm, stubs} {
		got, want := body(t, name), body(t, filepath.Base(name))
		if !bytes.Equal(got, want) {
			t.Errorf("%s is not what rowgen writes: run \"go generate ./pipeline/solve/row\"", filepath.Base(name))
		}
	}
}

// body is a generated file from its second line on; the first quotes the
// command.
func body(t *testing.T, name string) []byte {
	t.Helper()
	b, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	_, rest, _ := bytes.Cut(b, []byte("\n"))
	return rest
}
