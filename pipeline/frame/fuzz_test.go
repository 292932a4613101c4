package frame

import (
	"bytes"
	"math"
	"runtime/metrics"
	"strings"
	"testing"
	"time"
)

// fuzzLimits keep one run small.
var fuzzLimits = Limits{MaxPixels: 1 << 16, MaxBytes: 1 << 20}

// samePixels compares bit for bit, any NaN being equal to any other.
func samePixels(f, g *Frame) bool {
	if f.W != g.W || f.H != g.H || len(f.Pix) != len(g.Pix) || f.NonFinite != g.NonFinite {
		return false
	}
	for i, v := range f.Pix {
		if u := g.Pix[i]; math.Float32bits(u) != math.Float32bits(v) && !(u != u && v != v) {
			return false
		}
	}
	return true
}

// allocated is all memory taken since the program started, freed or not.
func allocated() uint64 {
	m := []metrics.Sample{{Name: "/gc/heap/allocs:bytes"}}
	metrics.Read(m)
	return m[0].Value.Uint64()
}

// checkDecode decodes b and, if it is a frame, writes it and decodes again.
func checkDecode(t *testing.T, b []byte) {
	before := allocated()
	f, err := decodeBytes(b, fuzzLimits)
	for _, loc := range []*time.Location{time.UTC, time.FixedZone("x", 3600)} {
		if int64(len(b)) <= fuzzLimits.MaxBytes {
			tagTime(newSource(bytes.NewReader(b), int64(len(b)), fuzzLimits), loc)
		}
	}
	if got, most := allocated()-before, uint64(8<<20+64*len(b)); got > most {
		t.Errorf("took %d bytes of memory for a file of %d, want at most %d", got, len(b), most)
	}
	if err != nil {
		if !strings.Contains(err.Error(), "; ") {
			t.Errorf("error without a remedy: %v", err)
		}
		return
	}
	if f.W <= 0 || f.H <= 0 || len(f.Pix) != f.W*f.H || int64(len(f.Pix)) > fuzzLimits.MaxPixels {
		t.Fatalf("%d×%d pixels, %d values", f.W, f.H, len(f.Pix))
	}
	p, err := parse(newSource(bytes.NewReader(b), int64(len(b)), fuzzLimits))
	if err != nil || p.w != f.W || p.h != f.H {
		t.Fatalf("header %v (%v), decoded %d×%d", p, err, f.W, f.H)
	}
	var out bytes.Buffer
	if err := WriteNPY(&out, []int{f.H, f.W}, f.Pix); err != nil {
		t.Fatal(err)
	}
	again(t, "NPY", f, out.Bytes())
	codes := make([]uint16, len(f.Pix))
	for i, v := range f.Pix {
		if codes[i] = uint16(min(max(v, 0), 65535)); float32(codes[i]) != v || v == 0 && math.Signbit(float64(v)) {
			return
		}
	}
	out.Reset()
	if err := WriteTIFFAt(&out, f.W, f.H, codes, f.Taken); err != nil {
		t.Fatal(err)
	}
	again(t, "TIFF", f, out.Bytes())
}

func again(t *testing.T, kind string, f *Frame, b []byte) {
	t.Helper()
	g, err := decodeBytes(b, Limits{MaxPixels: fuzzLimits.MaxPixels})
	if err != nil {
		t.Fatalf("written as %s: %v", kind, err)
	}
	if !samePixels(f, g) {
		t.Fatalf("written as %s it decodes to other pixels", kind)
	}
	if y := f.Taken.Year(); kind == "TIFF" && y > 0 && y < 10000 && !g.Taken.Equal(asUTC(f.Taken)) {
		t.Fatalf("written as TIFF it was taken at %v, want %v", g.Taken, f.Taken)
	}
}

// asUTC is what a tag without a zone says of t.
func asUTC(t time.Time) time.Time {
	return time.Date(t.Year(), t.Month(), t.Day(), t.Hour(), t.Minute(), t.Second(), t.Nanosecond(), time.UTC)
}

func fuzzFrame(f *testing.F, suffix string) {
	for name, b := range samples(f) {
		if strings.HasSuffix(name, suffix) {
			f.Add(b)
		}
	}
	f.Fuzz(func(t *testing.T, b []byte) { checkDecode(t, b) })
}

func FuzzTIFF(f *testing.F) { fuzzFrame(f, ".tif") }
func FuzzPNG(f *testing.F)  { fuzzFrame(f, ".png") }
func FuzzFITS(f *testing.F) { fuzzFrame(f, ".fits") }

func FuzzNPY(f *testing.F) {
	for name, b := range samples(f) {
		if strings.HasSuffix(name, ".npy") {
			f.Add(b)
		}
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		checkDecode(t, b)
		shape, data, err := ReadNPY(bytes.NewReader(b), int64(len(b)), fuzzLimits)
		if err != nil {
			return
		}
		var out bytes.Buffer
		if err := WriteNPY(&out, shape, data); err != nil {
			t.Fatal(err)
		}
		back, data2, err := ReadNPY(bytes.NewReader(out.Bytes()), int64(out.Len()), Limits{})
		if err != nil || len(back) != len(shape) {
			t.Fatalf("shape %v became %v (%v)", shape, back, err)
		}
		a, b2 := &Frame{W: 1, H: len(data), Pix: data}, &Frame{W: 1, H: len(data2), Pix: data2}
		if !samePixels(a, b2) {
			t.Fatal("written and read again it differs")
		}
	})
}

// FuzzStamp gives any pattern any name.
func FuzzStamp(f *testing.F) {
	for _, c := range stampCases {
		f.Add(c.pattern, c.name)
	}
	f.Fuzz(func(t *testing.T, spec, name string) {
		s, err := NewStamper(spec, time.UTC)
		if err != nil {
			return
		}
		got := s.Match(name)
		if s.source != "name" {
			return
		}
		st, err := s.Stamp(name, time.Time{})
		if err != nil {
			return
		}
		if !got && s.pattern.match(name) == nil && !strings.ContainsAny(name, `/\`) {
			t.Errorf("pattern %q stamps %q, which it does not match", spec, name)
		}
		if st.Time.IsZero() && !st.HasShot || st.Shot < 0 || st.Weak || st.Source != "name" {
			t.Errorf("pattern %q, name %q: stamp %+v", spec, name, st)
		}
	})
}

// FuzzSidecar reads any text as a sidecar.
func FuzzSidecar(f *testing.F) {
	for _, c := range sidecarCases {
		f.Add([]byte(c.text))
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		var st Stamp
		if err := parseSidecar(&st, b, time.UTC); err == nil && (!st.HasShot && st.Time.IsZero() && !bytes.Contains(b, []byte("0001-01-01"))) {
			t.Errorf("%q gives %+v", b, st)
		}
	})
}
