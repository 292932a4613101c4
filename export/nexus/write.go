package nexus

import (
	"bufio"
	"context"
	"encoding/binary"
	"fmt"
	"io"
	"os"
	"runtime"
)

// Options say how to write.
type Options struct {
	// Workers is the number of goroutines that compress chunks. 0: one per
	// core that Go may use.
	Workers int
}

// superblockSize is the size of a version 2 superblock.
const superblockSize = 48

// signature begins every HDF5 file.
const signature = "\x89HDF\r\n\x1a\n"

// WriteFile writes the tree to a new file and syncs it to the disk. An
// existing file is refused; after an error the part written is removed.
func WriteFile(ctx context.Context, path string, root Group, o Options) error {
	f, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o666)
	if err != nil {
		return err
	}
	err = Write(ctx, f, root, o)
	if err == nil {
		err = f.Sync()
	}
	if e := f.Close(); err == nil {
		err = e
	}
	if err != nil {
		os.Remove(path)
		return fmt.Errorf("write %s: %w", path, err)
	}
	return nil
}

// Write writes the tree as one HDF5 file from w's beginning. Data come first,
// then chunk indexes, attribute strings and headers; the superblock is
// written last, so that an interrupted file is no HDF5 file at all.
func Write(ctx context.Context, w io.WriteSeeker, root Group, o Options) error {
	if err := root.check("/", 0); err != nil {
		return err
	}
	if o.Workers <= 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	if _, err := w.Seek(0, io.SeekStart); err != nil {
		return err
	}
	s := &sink{w: bufio.NewWriterSize(w, 1<<18)}
	s.write(make([]byte, superblockSize))
	h := &heap{index: map[string]int{}}
	t := &tree{ctx: ctx, s: s, heap: h, workers: o.Workers, place: map[*Dataset]placed{}}
	if err := t.data(&root, "/"); err != nil {
		return err
	}
	if err := t.collect(&root); err != nil {
		return err
	}
	h.place(s)
	top, err := t.group(&root)
	if err != nil {
		return err
	}
	end := s.align()
	if s.err == nil {
		s.err = s.w.Flush()
	}
	if s.err != nil {
		return s.err
	}
	if _, err := w.Seek(0, io.SeekStart); err != nil {
		return err
	}
	if _, err := w.Write(superblock(end, top)); err != nil {
		return err
	}
	_, err = w.Seek(0, io.SeekEnd)
	return err
}

func superblock(end, root uint64) []byte {
	le := binary.LittleEndian
	b := append([]byte(signature), 2, 8, 8, 0) // version, size of offsets and of lengths, flags
	b = le.AppendUint64(b, 0)                  // base address
	b = le.AppendUint64(b, undefined)          // no extension
	b = le.AppendUint64(le.AppendUint64(b, end), root)
	return le.AppendUint32(b, checksum(b))
}

// sink appends to the file and remembers the first error.
type sink struct {
	w   *bufio.Writer
	off uint64
	err error
}

func (s *sink) write(b []byte) {
	if s.err == nil {
		_, s.err = s.w.Write(b)
	}
	s.off += uint64(len(b))
}

// align pads to a multiple of 8 bytes and returns the offset.
func (s *sink) align() uint64 {
	if n := -s.off & 7; n > 0 {
		s.write(make([]byte, n))
	}
	return s.off
}
