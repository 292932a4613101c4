package frame

import (
	"errors"
	"fmt"
	"strings"
	"testing"
)

// TestTIFFHeaders changes single tags of a picture of 3×2 pixels of 16 bits.
func TestTIFFHeaders(t *testing.T) {
	usual := map[uint32]uint32{tagWidth: 3, tagHeight: 2, tagBits: 16, tagCompression: 1, tagPhotometric: 1,
		tagStripOffsets: 8, tagSamples: 1, tagRowsPerStrip: 2, tagStripCounts: 12}
	const none = 1 << 31 // leave the tag out
	for _, c := range []struct {
		name   string
		change map[uint32]uint32
		want   error
		word   string
	}{
		{"usual", nil, nil, ""},
		{"defaults", map[uint32]uint32{tagCompression: none, tagPhotometric: none, tagSamples: none, tagRowsPerStrip: none}, nil, ""},
		{"no sizes", map[uint32]uint32{tagStripCounts: none}, nil, ""},
		{"size too large", map[uint32]uint32{tagStripCounts: 20}, nil, ""},
		{"tiles under strip tags", map[uint32]uint32{tagTileWidth: 3, tagTileHeight: 2}, nil, ""},
		{"no width", map[uint32]uint32{tagWidth: none}, ErrFormat, "no width"},
		{"width 0", map[uint32]uint32{tagWidth: 0}, ErrEmpty, "0×2"},
		{"no offsets", map[uint32]uint32{tagStripOffsets: none}, ErrFormat, "no strip offsets"},
		{"offset 0", map[uint32]uint32{tagStripOffsets: 0}, ErrTruncated, "not written"},
		{"size 0", map[uint32]uint32{tagStripCounts: 0}, ErrTruncated, "not written"},
		{"far offset", map[uint32]uint32{tagStripOffsets: 1 << 30}, ErrTruncated, "strip 1 of 1"},
		{"more strips than offsets", map[uint32]uint32{tagRowsPerStrip: 1}, ErrFormat, "has 1 values, want 2"},
		{"rows 0", map[uint32]uint32{tagRowsPerStrip: 0}, ErrFormat, "3×0 pixels"},
		{"no sizes, packed", map[uint32]uint32{tagStripCounts: none, tagCompression: packBits}, ErrFormat, "no strip byte counts"},
		{"unknown coding", map[uint32]uint32{tagCompression: 999}, ErrFormat, "999 (unknown)"},
		{"no bits", map[uint32]uint32{tagBits: none}, ErrFormat, "1 bits"},
		{"11 bits", map[uint32]uint32{tagBits: 11}, ErrFormat, "11 bits"},
		{"white float", map[uint32]uint32{tagBits: 32, tagSampleFormat: 3, tagPhotometric: 0}, ErrFormat, "no meaning"},
		{"predictor 3 of integers", map[uint32]uint32{tagCompression: lzwCoded, tagPredictor: 3}, ErrFormat, "predictor 3"},
		{"predictor 2 of 12 bits", map[uint32]uint32{tagCompression: lzwCoded, tagPredictor: 2, tagBits: 12}, ErrFormat, "predictor 2"},
		{"predictor of plain pixels", map[uint32]uint32{tagPredictor: 2}, nil, ""}, // has no meaning without LZW or Deflate
		{"far too many strips", map[uint32]uint32{tagWidth: 1, tagHeight: 1<<20 + 1, tagRowsPerStrip: 1}, ErrFormat, "more than"},
		{"LZW that runs out", map[uint32]uint32{tagCompression: lzwCoded}, ErrTruncated, "ends early"},
		{"damaged Deflate", map[uint32]uint32{tagCompression: deflated}, ErrFormat, "damaged"},
	} {
		tags := map[uint32]uint32{}
		for k, v := range usual {
			tags[k] = v
		}
		for k, v := range c.change {
			tags[k] = v
		}
		var list [][2]uint32
		for k := uint32(0); k < 1<<16; k++ {
			if v, ok := tags[k]; ok && v != none {
				list = append(list, [2]uint32{k, v})
			}
		}
		_, err := decodeBytes(plainTIFF(list), Limits{})
		if !errors.Is(err, c.want) || err != nil && !strings.Contains(err.Error(), c.word) {
			t.Errorf("%s: error %v, want %v with %q", c.name, err, c.want, c.word)
		}
	}
}

// TestFITSHeaders reads headers of a 3×2 picture, then its pixels.
func TestFITSHeaders(t *testing.T) {
	for _, c := range []struct {
		cards string // instead of the usual ones of the same name, and more
		want  error
		word  string
	}{
		{"", nil, ""},
		{"BSCALE = 1.5D0 / a comment|BZERO = -2|OBJECT = 'a ''b'' / c'", nil, ""},
		{"NAXIS = 4|NAXIS3 = 1|NAXIS4 = 1", nil, ""},
		{"BITPIX = 12", ErrFormat, "BITPIX is 12"},
		{"BITPIX = x", ErrFormat, `BITPIX is "x"`},
		{"BSCALE = 0", ErrFormat, "BSCALE is 0"},
		{"BSCALE = inf", ErrFormat, `BSCALE is "inf"`},
		{"BZERO = one", ErrFormat, `BZERO is "one"`},
		{"BLANK = 1.5", ErrFormat, `BLANK is "1.5"`},
		{"NAXIS = 1", ErrFormat, "one axis"},
		{"NAXIS = -2", ErrFormat, "NAXIS"},
		{"NAXIS = 5", ErrFormat, "NAXIS3 is missing"},
		{"NAXIS1 = 0", ErrEmpty, "0×2"},
		{"NAXIS1 = 0|GROUPS = T", ErrFormat, "random groups"},
		{"NAXIS = 3|NAXIS3 = 2", ErrFormat, "more than one picture"},
		{"NAXIS2 = 99999", ErrTruncated, "the FITS array"},
		{"NAXIS = 0|BITPIX = 1.5", ErrFormat, `BITPIX is "1.5"`},
	} {
		keys := []string{"SIMPLE = T", "BITPIX = 16", "NAXIS = 2", "NAXIS1 = 3", "NAXIS2 = 2"}
		for _, card := range strings.Split(c.cards, "|") {
			name, _, _ := strings.Cut(card, " ")
			found := false
			for i := range keys {
				if strings.HasPrefix(keys[i], name+" ") {
					keys[i], found = card, true
				}
			}
			if !found && card != "" {
				keys = append(keys, card)
			}
		}
		var head string
		for _, k := range keys {
			name, value, _ := strings.Cut(k, " = ")
			head += fmt.Sprintf("%-80s", fmt.Sprintf("%-8s= %s", name, value))
		}
		head += fmt.Sprintf("%-80s", "END")
		_, err := decodeBytes([]byte(fmt.Sprintf("%-2880s", head)+strings.Repeat("\x00\x07", 1440)), Limits{})
		if !errors.Is(err, c.want) || err != nil && !strings.Contains(err.Error(), c.word) {
			t.Errorf("%s: error %v, want %v with %q", c.cards, err, c.want, c.word)
		}
	}
}

// TestCards compares the value fields of FITS 4.0, section 4.2.
func TestCards(t *testing.T) {
	for in, want := range map[string]string{
		"                   7 / seven": "7", "'text    ' / words": "text", "'O''HARA'": "O'HARA", "''": "", "'a / b'": "a / b",
		"  T": "T", "1.5E3/x": "1.5E3", "'open": "open", "": "",
	} {
		if got := cardValue(in); got != want {
			t.Errorf("%q: %q, want %q", in, got, want)
		}
	}
}

func TestNPYHeaders(t *testing.T) {
	for _, c := range []struct {
		head string
		want error
	}{
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (2, 3), }", nil},
		{`{"shape":(2L,3L,),"descr":"<u2","fortran_order":True}`, nil},
		{"{'descr': '|u1', 'fortran_order': False, 'shape': (2, 3)}\n", nil},
		{"{'descr': '|u2', 'fortran_order': False, 'shape': (2, 3)}", ErrFormat},
		{"{'descr': '=u2', 'fortran_order': False, 'shape': (2, 3)}", ErrFormat},
		{"{'descr': '<u3', 'fortran_order': False, 'shape': (2, 3)}", ErrFormat},
		{"{'descr': [('a', '<f4')], 'fortran_order': False, 'shape': (2, 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': 0, 'shape': (2, 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (2 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (6)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (-2, 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': [2, 3]}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (99999999999999999999, 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (1, 1, 1, 2, 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False}", ErrFormat},
		{"{'descr': '<u2', 'descr': '<u2', 'fortran_order': False, 'shape': (2, 3)}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (2, 3), 'more': 1}", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (2, 3)} x", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (2, 3)", ErrFormat},
		{"", ErrFormat},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (0, 3)}", ErrEmpty},
		{"{'descr': '<u2', 'fortran_order': False, 'shape': (2, 4)}", ErrTruncated},
	} {
		b := fmt.Appendf(nil, "\x93NUMPY\x01\x00%c\x00%s%s", len(c.head), c.head, strings.Repeat("\x01\x00", 6))
		if _, err := decodeBytes(b, Limits{}); !errors.Is(err, c.want) {
			t.Errorf("%s: error %v, want %v", c.head, err, c.want)
		}
	}
	for _, b := range []string{"\x93NUMPY\x04\x00\x10\x00{}", "\x93NUMPY\x02\x00\xff\xff\xff\x7f{}"} {
		if _, err := decodeBytes([]byte(b), Limits{}); !errors.Is(err, ErrFormat) {
			t.Errorf("%q: error %v, want ErrFormat", b, err)
		}
	}
}
