package export

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"os"
	"path/filepath"
	"sync"

	"unsheard/export/nexus"
)

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
	s := nexus.Shot{Title: r.Shot, Start: from.Taken.Time, Program: from.Program, Version: from.Version,
		Made: from.Started.Time, Cube: r.Cube, Provenance: r.Provenance, Bits: o.Bits,
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
