package export

import (
	"context"
	"crypto/rand"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"strings"
	"sync"

	"unsheard/export/nexus"
)

// Publish writes the result folder dir, whole or not at all; see the package
// comment. The folder that dir stands in must exist. Errors carry the
// system's reason for errors.Is, for example syscall.ENOSPC; see [Retryable].
func Publish(ctx context.Context, dir string, r Result, o Options) error {
	o.fill()
	from, err := r.check()
	if err == nil {
		dir, err = checkPlace(dir, from)
	}
	if err == nil {
		err = publish(ctx, dir, &r, from, &o)
	}
	if err != nil {
		return fmt.Errorf("publish %s: %w", dir, err)
	}
	return nil
}

func publish(ctx context.Context, dir string, r *Result, from origin, o *Options) error {
	s := newSwap(dir, o)
	if !s.wanted(r) {
		return nil
	}
	if err := s.build(ctx, r, from, o); err != nil {
		// On a full disk this makes room again; what cannot be removed now
		// is left to Sweep.
		_ = o.disk.removeAll(s.partial)
		return err
	}
	return s.swap(ctx)
}

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

// token is unused by any other process and attempt, and tells when it was
// made: milliseconds since 1970 in base 36, then 48 random bits, then what is
// left of the attempt's name.
func token(o *Options) string {
	var b [6]byte
	rand.Read(b[:]) // never fails
	t := strconv.FormatInt(o.now().UnixMilli(), 36) + "-" + hex.EncodeToString(b[:])
	for _, c := range strings.ToLower(o.Attempt) {
		if len(t) < 38 && (c >= 'a' && c <= 'z' || c >= '0' && c <= '9') {
			t += string(c)
		}
	}
	return t
}

// build fills the partial folder and gives it its ready name.
func (s *swap) build(ctx context.Context, r *Result, from origin, o *Options) error {
	if err := s.disk.mkdir(s.partial); err != nil {
		return err
	}
	defer s.abandon()
	files := map[string]jsonFile{}
	for _, p := range o.parts(r, from, o) {
		if err := ctx.Err(); err != nil {
			return err
		}
		info, err := s.write(p.name, func(w io.WriteSeeker) error { return p.write(ctx, w) })
		if err != nil {
			return fmt.Errorf("write %s: %w", p.name, err)
		}
		files[p.name] = info
	}
	_, err := s.write(fileMetrics, func(w io.WriteSeeker) error { return newDocument(r, files).write(w) })
	if err != nil {
		return fmt.Errorf("write %s: %w", fileMetrics, err)
	}
	if err := s.seal(); err != nil {
		return err
	}
	if err := s.disk.syncDir(s.partial); err != nil {
		return err
	}
	return s.disk.move(ctx, s.partial, s.ready)
}

// part is one file of the folder.
type part struct {
	name  string
	write func(context.Context, io.WriteSeeker) error
}

// parts lists the files but metrics.json.
func parts(r *Result, from origin, o *Options) []part {
	plain := func(f func(io.Writer) error) func(context.Context, io.WriteSeeker) error {
		return func(_ context.Context, w io.WriteSeeker) error { return f(w) }
	}
	list := []part{
		{fileCube, func(ctx context.Context, w io.WriteSeeker) error {
			return nexus.WriteShot(ctx, w, shot(r, from, o), nexus.Options{Workers: o.Workers})
		}},
		{fileContact, plain(func(w io.Writer) error { return contact(w, r) })},
		{fileMovie, plain(func(w io.Writer) error { return movie(w, r) })},
		{fileLight, plain(func(w io.Writer) error { return light(w, r) })},
		{fileArrival, plain(func(w io.Writer) error { return arrival(w, r) })},
		{fileLog, plain(func(w io.Writer) error { _, err := w.Write(r.Log); return err })},
	}
	if len(r.Frames) > 0 {
		list = append(list, part{fileResidual, plain(func(w io.Writer) error { return residual(w, r) })})
	}
	return list
}

func shot(r *Result, from origin, o *Options) nexus.Shot {
	s := nexus.Shot{Title: r.Shot, Start: from.Taken, Program: from.Program, Version: from.Version,
		Made: from.Started, Cube: r.Cube, Provenance: r.Provenance, Bits: o.Bits,
		Note: fmt.Sprintf("pass %s, bundle %s", r.Pass, r.Bundle)}
	for _, f := range r.Frames {
		s.Frames = append(s.Frames, nexus.Frame{Arm: f.Arm, W: f.W, H: f.H,
			Data: f.Measured, Model: f.Model, Variance: f.Variance})
	}
	return s
}

// seal syncs and closes all files. The syncs run side by side, as a file
// system that writes one journal serves many at the price of one.
func (s *swap) seal() error {
	errs := make([]error, len(s.open))
	var wg sync.WaitGroup
	for i, f := range s.open {
		wg.Go(func() {
			errs[i] = f.Sync()
			if err := f.Close(); errs[i] == nil {
				errs[i] = err
			}
		})
	}
	wg.Wait()
	s.open = nil
	return errors.Join(errs...)
}

// abandon closes what an error left open.
func (s *swap) abandon() {
	for _, f := range s.open {
		_ = f.Close() // the folder is removed anyway
	}
	s.open = nil
}

// write creates one file, leaves it open for seal, and returns its size and
// checksum.
func (s *swap) write(name string, fill func(io.WriteSeeker) error) (jsonFile, error) {
	path := filepath.Join(s.partial, name)
	f, err := s.disk.create(path)
	if err != nil {
		return jsonFile{}, err
	}
	s.open = append(s.open, f)
	w := &summer{file: f, hash: sha256.New()}
	if err := fill(w); err != nil {
		return jsonFile{}, err
	}
	if w.sought {
		return sum(path)
	}
	return jsonFile{Bytes: w.n, SHA256: hex.EncodeToString(w.hash.Sum(nil))}, nil
}

// summer sums what is written, unless the writer seeks back.
type summer struct {
	file
	hash   hash.Hash
	n      int64
	sought bool
}

func (s *summer) Write(b []byte) (int, error) {
	n, err := s.file.Write(b)
	s.n += int64(n)
	s.hash.Write(b[:n])
	return n, err
}

func (s *summer) Seek(off int64, whence int) (int64, error) {
	s.sought = true
	return s.file.Seek(off, whence)
}

// sum reads a file's size and checksum.
func sum(path string) (jsonFile, error) {
	f, err := os.Open(path)
	if err != nil {
		return jsonFile{}, err
	}
	defer f.Close()
	h := sha256.New()
	n, err := io.Copy(h, f)
	if err != nil {
		return jsonFile{}, fmt.Errorf("read %s: %w", path, err)
	}
	return jsonFile{Bytes: n, SHA256: hex.EncodeToString(h.Sum(nil))}, nil
}
