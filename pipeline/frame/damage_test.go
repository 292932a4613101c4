package frame

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
)

// sample files of every format, read into memory.
func samples(t testing.TB) map[string][]byte {
	t.Helper()
	paths, err := filepath.Glob(filepath.Join("testdata", "files", "*.*"))
	if err != nil {
		t.Fatal(err)
	}
	out := map[string][]byte{}
	for _, p := range paths {
		if strings.HasSuffix(p, ".want") || strings.HasSuffix(p, ".json") {
			continue
		}
		b, err := os.ReadFile(p)
		if err != nil {
			t.Fatal(err)
		}
		out[filepath.Base(p)] = b
	}
	if len(out) < 20 {
		t.Fatalf("only %d files in testdata/files", len(out))
	}
	return out
}

func decodeBytes(b []byte, lim Limits) (*Frame, error) {
	return Decode(bytes.NewReader(b), int64(len(b)), "mem", lim)
}

// TestCut cuts every file at every length: it is reported as not complete,
// or only padding was lost and the pixels are the same.
func TestCut(t *testing.T) {
	for name, b := range samples(t) {
		whole, err := decodeBytes(b, Limits{})
		if err != nil {
			continue // one of the files to be refused
		}
		for n := range b {
			f, err := decodeBytes(b[:n], Limits{})
			switch {
			case err == nil && !samePixels(f, whole):
				t.Errorf("%s cut to %d of %d bytes decodes to other pixels", name, n, len(b))
			case err != nil && !errors.Is(err, ErrTruncated) && !errors.Is(err, ErrEmpty):
				t.Errorf("%s cut to %d of %d bytes: %v, want ErrTruncated", name, n, len(b), err)
			case err == nil && n < len(b)-spare(name):
				t.Errorf("%s cut to %d of %d bytes decodes", name, n, len(b))
			}
		}
	}
}

// spare is how many bytes at the end of a file are no part of its picture:
// FITS padding, a FITS or TIFF file's further pictures, the pointer to the
// next TIFF page and values of tags that do not bear on the pixels.
func spare(name string) int {
	switch {
	case strings.HasSuffix(name, ".fits"):
		return 3 * block
	case name == "tf-u2-pages.tif":
		return 2 * 500
	}
	return 64
}

// plainTIFF is a TIFF header and directory of LONG tags, filled up to at least
// 130 bytes.
func plainTIFF(tags [][2]uint32) []byte {
	le := binary.LittleEndian
	b := append([]byte("II*\x00"), 8, 0, 0, 0)
	b = le.AppendUint16(b, uint16(len(tags)))
	for _, t := range tags {
		b = le.AppendUint16(le.AppendUint16(b, uint16(t[0])), 4)
		b = le.AppendUint32(le.AppendUint32(b, 1), t[1])
	}
	return append(b, make([]byte, max(130-len(b), 4))...)
}

// TestClaims reads small files that claim large pictures. They are refused,
// and without taking memory for them.
func TestClaims(t *testing.T) {
	type claim struct {
		name string
		data []byte
		want error
	}
	var list []claim
	for _, c := range []uint32{plain, lzwCoded, deflated, deflateOld, packBits} {
		for _, side := range []uint32{30000, 8000} {
			want := map[uint32]error{30000: ErrTooLarge, 8000: ErrTruncated}[side]
			list = append(list, claim{fmt.Sprintf("tiff %d %d", c, side), plainTIFF([][2]uint32{{tagWidth, side},
				{tagHeight, side}, {tagBits, 16}, {tagCompression, c}, {tagStripOffsets, 8}, {tagStripCounts, 100}}), want})
		}
	}
	tile := [][2]uint32{{tagWidth, 10}, {tagHeight, 10}, {tagBits, 16}, {tagCompression, deflated},
		{tagTileWidth, 60_000_000}, {tagTileHeight, 60_000_000}, {tagTileOffsets, 8}, {tagTileCounts, 100}}
	list = append(list, claim{"tiff tile", plainTIFF(tile), ErrTruncated})
	png := slices.Clone(samples(t)["pil-u2.png"])
	for _, side := range []uint32{30000, 8000} {
		b := slices.Clone(png)
		binary.BigEndian.PutUint32(b[16:], side)
		binary.BigEndian.PutUint32(b[20:], side)
		list = append(list, claim{fmt.Sprintf("png %d", side), b, map[uint32]error{30000: ErrTooLarge, 8000: ErrTruncated}[side]})
		list = append(list, claim{fmt.Sprintf("npy %d", side),
			fmt.Appendf(nil, "\x93NUMPY\x01\x00\x50\x00%-80s", fmt.Sprintf("{'descr': '<f4', 'fortran_order': True, 'shape': (%d, %d), }", side, side)),
			map[uint32]error{30000: ErrTooLarge, 8000: ErrTruncated}[side]})
		var cards string
		for _, c := range []string{"SIMPLE  =                    T", "BITPIX  = 16", "NAXIS   = 2", fmt.Sprintf("NAXIS1  = %d", side), fmt.Sprintf("NAXIS2  = %d", side), "END"} {
			cards += fmt.Sprintf("%-80s", c)
		}
		list = append(list, claim{fmt.Sprintf("fits %d", side), fmt.Appendf(nil, "%-2880s", cards), map[uint32]error{30000: ErrTooLarge, 8000: ErrTruncated}[side]})
	}
	list = append(list, claim{"npy wide", fmt.Appendf(nil, "\x93NUMPY\x01\x00\x76\x00%-118s", "{'descr': '<f8', 'fortran_order': True, 'shape': (4294967296, 4294967296), }"), ErrTooLarge})
	const most = 2 << 20 // buffers of fixed size; the pictures would take 256 MB and more
	for _, c := range list {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		_, err := decodeBytes(c.data, Limits{})
		runtime.ReadMemStats(&after)
		if !errors.Is(err, c.want) {
			t.Errorf("%s: error %v, want %v", c.name, err, c.want)
		}
		if got := after.TotalAlloc - before.TotalAlloc; got > most {
			t.Errorf("%s: took %d bytes of memory, want at most %d", c.name, got, most)
		}
	}
}

// TestLimits checks that both limits hold and that the defaults let a usual
// frame pass.
func TestLimits(t *testing.T) {
	b := samples(t)["tf-u2-le.tif"] // 9×17 pixels
	for _, c := range []struct {
		lim  Limits
		want error
	}{
		{Limits{}, nil}, {Limits{MaxPixels: 153}, nil}, {Limits{MaxPixels: 152}, ErrTooLarge},
		{Limits{MaxBytes: int64(len(b))}, nil}, {Limits{MaxBytes: int64(len(b)) - 1}, ErrTooLarge},
	} {
		if _, err := decodeBytes(b, c.lim); !errors.Is(err, c.want) {
			t.Errorf("%+v: error %v, want %v", c.lim, err, c.want)
		}
	}
}

// TestNoFrame reads what is no frame; the error names the file.
func TestNoFrame(t *testing.T) {
	dir := t.TempDir()
	write := func(name, text string) string {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
		return path
	}
	for _, c := range []struct {
		path string
		want error
	}{
		{filepath.Join(dir, "gone.tif"), fs.ErrNotExist},
		{dir, ErrFormat},
		{write("empty.tif", ""), ErrEmpty},
		{write("zeros.tif", strings.Repeat("\x00", 100)), ErrTruncated},
		{write("start.png", "\x89PN"), ErrTruncated},
		{write("unwritten.tif", "II*\x00\x00\x00\x00\x00more bytes follow"), ErrTruncated},
		{write("text.tif", "this is a text"), ErrFormat},
		{write("jpeg.tif", "\xff\xd8\xff\xe0\x00\x10JFIF"), ErrFormat},
	} {
		_, err := Read(c.path, Limits{})
		if !errors.Is(err, c.want) || !strings.Contains(err.Error(), fmt.Sprintf("%q", c.path)) {
			t.Errorf("Read: error %v, want %v naming %s", err, c.want, c.path)
		}
		if _, _, err := Shape(c.path, Limits{}); !errors.Is(err, c.want) {
			t.Errorf("Shape: error %v, want %v", err, c.want)
		}
	}
}

// failing gives an error from a certain offset on.
type failing struct {
	io.ReaderAt
	from int64
	err  error
}

func (f failing) ReadAt(p []byte, off int64) (int, error) {
	if off+int64(len(p)) > f.from {
		return 0, f.err
	}
	return f.ReaderAt.ReadAt(p, off)
}

// TestReadError lets the file system fail at every offset: its error comes
// through, so that the caller can try again, and does not pass for damage.
func TestReadError(t *testing.T) {
	disk := errors.New("share went away")
	for name, b := range samples(t) {
		if _, err := decodeBytes(b, Limits{}); err != nil {
			continue
		}
		for from := range int64(len(b)) {
			r := failing{bytes.NewReader(b), from, disk}
			_, err := Decode(r, int64(len(b)), name, Limits{})
			if err != nil && !errors.Is(err, disk) {
				t.Errorf("%s, reads fail from byte %d: %v", name, from, err)
			}
			r.err = io.EOF // the file shrank
			if _, err = Decode(r, int64(len(b)), name, Limits{}); err != nil && !errors.Is(err, ErrTruncated) {
				t.Errorf("%s, shrunk to %d bytes: %v", name, from, err)
			}
		}
	}
}

// TestChecksum flips one bit in compressed pixels; Deflate notices.
func TestChecksum(t *testing.T) {
	for name, at := range map[string]int{"tf-u4-be-zip.tif": -20, "pil-u2.png": -20} {
		b := slices.Clone(samples(t)[name])
		b[len(b)+at] ^= 4
		if _, err := decodeBytes(b, Limits{}); !errors.Is(err, ErrFormat) && !errors.Is(err, ErrTruncated) {
			t.Errorf("%s with a flipped bit: error %v, want ErrFormat", name, err)
		}
	}
}
