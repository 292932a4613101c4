package nexus

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"os"
)

var (
	// ErrDamaged says that a file contradicts itself or its checksums.
	ErrDamaged = errors.New("damaged HDF5 file")
	// ErrUnsupported says that a file uses what this package never writes.
	ErrUnsupported = errors.New("HDF5 feature not written by this program")
	// ErrNone says that a file holds no object of that name.
	ErrNone = errors.New("no such object")
)

// maxObjects bounds the objects of one file; ours hold a few dozen.
const maxObjects = 4096

// File is an open file of ours. It is safe for concurrent use.
type File struct {
	r       io.ReaderAt
	size    int64
	close   func() error
	objects map[string]*object
	paths   []string
	headers int64           // bytes of all object headers read
	at      map[uint64]bool // addresses of the headers read
}

// object is a group or a dataset.
type object struct {
	attrs  []rawAttr
	links  []link
	data   bool
	shape  []int
	typ    rawType
	layout layout
	filter bool
}

type link struct {
	name string
	addr uint64
}

// Open opens a file that this package wrote and reads its tree.
func Open(path string) (*File, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	st, err := f.Stat()
	if err == nil && !st.Mode().IsRegular() {
		err = errors.New("not a regular file")
	}
	var file *File
	if err == nil {
		file, err = NewFile(f, st.Size())
	}
	if err != nil {
		f.Close()
		return nil, fmt.Errorf("open %s: %w", path, err)
	}
	file.close = f.Close
	return file, nil
}

// NewFile reads the tree of a file held by r.
func NewFile(r io.ReaderAt, size int64) (*File, error) {
	f := &File{r: r, size: size, close: func() error { return nil }, objects: map[string]*object{}, at: map[uint64]bool{}}
	b, err := f.bytes(0, superblockSize)
	if err != nil {
		return nil, err
	}
	le := binary.LittleEndian
	switch {
	case string(b[:8]) != signature:
		return nil, fmt.Errorf("%w: no HDF5 signature at its beginning", ErrDamaged)
	case b[8] != 2 || b[9] != 8 || b[10] != 8 || le.Uint64(b[12:]) != 0:
		return nil, fmt.Errorf("%w: superblock version %d", ErrUnsupported, b[8])
	case le.Uint32(b[44:]) != checksum(b[:44]):
		return nil, fmt.Errorf("%w: superblock checksum", ErrDamaged)
	case le.Uint64(b[28:]) != uint64(size):
		return nil, fmt.Errorf("%w: %d bytes long, its header says %d", ErrDamaged, size, le.Uint64(b[28:]))
	}
	if err := f.walk(le.Uint64(b[36:]), "", 0); err != nil {
		return nil, err
	}
	return f, nil
}

// Close closes the file.
func (f *File) Close() error { return f.close() }

// Names lists the paths of all datasets in file order, for example
// entry/data/counts.
func (f *File) Names() []string {
	var n []string
	for _, p := range f.paths {
		if f.objects[p].data {
			n = append(n, p)
		}
	}
	return n
}

// Groups lists the paths of all groups; the root is "".
func (f *File) Groups() []string {
	var n []string
	for _, p := range f.paths {
		if !f.objects[p].data {
			n = append(n, p)
		}
	}
	return n
}

// Shape returns the sides of a dataset; nil for a scalar.
func (f *File) Shape(name string) ([]int, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	return append([]int(nil), o.shape...), nil
}

// Attr returns an attribute of the object at path: a string, []string, int,
// []int, float64 or []float64.
func (f *File) Attr(path, name string) (any, error) {
	o := f.objects[path]
	if o == nil {
		return nil, fmt.Errorf("%q: %w", path, ErrNone)
	}
	for _, a := range o.attrs {
		if a.name == name {
			v, err := f.attrValue(a)
			if err != nil {
				return nil, fmt.Errorf("attribute %s@%s: %w", path, name, err)
			}
			return v, nil
		}
	}
	return nil, fmt.Errorf("attribute %s@%s: %w", path, name, ErrNone)
}

func (f *File) dataset(name string) (*object, error) {
	o := f.objects[name]
	if o == nil || !o.data {
		return nil, fmt.Errorf("dataset %q: %w", name, ErrNone)
	}
	return o, nil
}

// bytes reads n bytes at addr after checking that the file holds them.
func (f *File) bytes(addr uint64, n int64) ([]byte, error) {
	if n < 0 || addr > uint64(f.size) || n > f.size-int64(addr) {
		return nil, fmt.Errorf("%w: %d bytes at %d of %d", ErrDamaged, n, addr, f.size)
	}
	b := make([]byte, n)
	if _, err := f.r.ReadAt(b, int64(addr)); err != nil && !(err == io.EOF && n == 0) {
		if err == io.EOF {
			err = io.ErrUnexpectedEOF
		}
		return nil, fmt.Errorf("read %d bytes at %d: %w", n, addr, err)
	}
	return b, nil
}

// walk reads the object at addr and everything below it.
func (f *File) walk(addr uint64, path string, depth int) error {
	if depth > maxDepth+1 || len(f.objects) >= maxObjects {
		return fmt.Errorf("%w: more than %d objects or %d levels", ErrUnsupported, maxObjects, maxDepth)
	}
	if f.objects[path] != nil || f.at[addr] {
		return fmt.Errorf("%w: %q is there twice", ErrDamaged, path)
	}
	f.at[addr] = true
	o, err := f.object(addr)
	if err != nil {
		return fmt.Errorf("object %q: %w", path, err)
	}
	f.objects[path] = o
	f.paths = append(f.paths, path)
	for _, l := range o.links {
		p := l.name
		if path != "" {
			p = path + "/" + l.name
		}
		if err := f.walk(l.addr, p, depth+1); err != nil {
			return err
		}
	}
	return nil
}
