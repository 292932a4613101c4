package frame

import (
	"bytes"
	"compress/zlib"
	"encoding/binary"
	"math/rand/v2"
	"testing"
)

var sink *Frame

// BenchmarkDecode decodes a frame of 2048×2048 pixels of 16 bits, smooth light
// with noise, in strips of eight rows, as most writers cut it.
func BenchmarkDecode(b *testing.B) {
	const side = 2048
	rng := rand.New(rand.NewPCG(1, 2))
	pix := make([]byte, 2*side*side)
	for i := range side * side {
		binary.LittleEndian.PutUint16(pix[2*i:], uint16(400+i%side/8+rng.IntN(32)))
	}
	for _, c := range []struct {
		name string
		code uint32
		pack func([]byte) []byte
	}{
		{"none", plain, func(p []byte) []byte { return p }},
		{"lzw", lzwCoded, lzwEncode},
		{"deflate", deflated, deflate},
	} {
		data := strips(pix, side, 8, c.code, c.pack)
		b.Run(c.name, func(b *testing.B) {
			b.ReportAllocs()
			b.SetBytes(2 * side * side)
			for b.Loop() {
				f, err := decodeBytes(data, Limits{})
				if err != nil {
					b.Fatal(err)
				}
				sink = f
			}
		})
	}
}

// TestBenchmarkFiles: the strips that are measured hold what they should.
func TestBenchmarkFiles(t *testing.T) {
	const side = 64
	pix := make([]byte, 2*side*side)
	for i := range pix {
		pix[i] = byte(i * i / 7)
	}
	want, err := decodeBytes(strips(pix, side, side, plain, bytes.Clone), Limits{})
	if err != nil {
		t.Fatal(err)
	}
	for code, pack := range map[uint32]func([]byte) []byte{lzwCoded: lzwEncode, deflated: deflate} {
		got, err := decodeBytes(strips(pix, side, 8, code, pack), Limits{})
		if err != nil || !samePixels(got, want) {
			t.Errorf("compression %d: other pixels (%v)", code, err)
		}
	}
}

// strips makes a little-endian TIFF file of 16-bit pixels.
func strips(pix []byte, side, rows int, code uint32, pack func([]byte) []byte) []byte {
	le := binary.LittleEndian
	b := append([]byte("II*\x00"), 0, 0, 0, 0)
	var offsets, sizes []byte
	for p := pix; len(p) > 0; p = p[2*side*rows:] {
		z := pack(p[:2*side*rows])
		offsets, sizes = le.AppendUint32(offsets, uint32(len(b))), le.AppendUint32(sizes, uint32(len(z)))
		b = append(b, z...)
	}
	n := uint32(len(sizes) / 4)
	at := uint32(len(b))
	b = append(append(b, offsets...), sizes...)
	if n == 1 { // a single value stands in the directory itself
		at = le.Uint32(offsets)
	}
	le.PutUint32(b[4:], uint32(len(b)))
	tags := [][3]uint32{{tagWidth, 1, uint32(side)}, {tagHeight, 1, uint32(side)}, {tagBits, 1, 16}, {tagCompression, 1, code},
		{tagPhotometric, 1, 1}, {tagStripOffsets, n, at}, {tagRowsPerStrip, 1, uint32(rows)}, {tagStripCounts, n, at + 4*n}}
	if n == 1 {
		tags[7][2] = le.Uint32(sizes)
	}
	b = le.AppendUint16(b, uint16(len(tags)))
	for _, t := range tags {
		b = le.AppendUint16(le.AppendUint16(b, uint16(t[0])), 4)
		b = le.AppendUint32(le.AppendUint32(b, t[1]), t[2])
	}
	return le.AppendUint32(b, 0)
}

func deflate(p []byte) []byte {
	var out bytes.Buffer
	w := zlib.NewWriter(&out)
	w.Write(p)
	w.Close()
	return out.Bytes()
}

// lzwEncode is the plain algorithm of TIFF 6.0, section 13.
func lzwEncode(p []byte) []byte {
	const restart, end, full = 256, 257, 4095
	var out []byte
	var acc uint64
	var have int
	width, next := 9, 258
	table := map[string]int{}
	emit := func(code int) {
		acc, have = acc<<width|uint64(code), have+width
		for have >= 8 {
			have -= 8
			out = append(out, byte(acc>>have))
		}
	}
	code := func(s []byte) int {
		if len(s) == 1 {
			return int(s[0])
		}
		return table[string(s)]
	}
	emit(restart)
	start := 0
	for i := range p {
		s := p[start : i+1]
		if _, ok := table[string(s)]; ok || len(s) == 1 {
			continue
		}
		emit(code(p[start:i]))
		table[string(s)] = next
		next++
		for width < 12 && next >= 1<<width {
			width++
		}
		if next == full {
			emit(restart)
			table = map[string]int{}
			width, next = 9, 258
		}
		start = i
	}
	emit(code(p[start:]))
	if next++; width < 12 && next >= 1<<width {
		width++
	}
	emit(end)
	width = 8 - have%8
	emit(0)
	return out
}
