package nexus

import (
	"bytes"
	"context"
	"math/rand/v2"
	"testing"
)

// readAll touches everything that a file offers.
func readAll(b []byte) {
	f, err := NewFile(bytes.NewReader(b), int64(len(b)))
	if err != nil {
		return
	}
	for _, name := range f.Names() {
		f.Shape(name)
		f.All(name)
		f.Float64(name)
		f.Text(name)
		f.Frame(name, 0)
	}
	for path, o := range f.objects {
		for _, a := range o.attrs {
			f.Attr(path, a.name)
		}
	}
}

func small(t testing.TB) []byte {
	r := rand.New(rand.NewPCG(3, 3))
	attrs := []Attr{{"a", "µ"}, {"b", []string{"x", "", "yz"}}, {"c", 3}, {"d", []float64{1, 2}}}
	g := Group{Class: "NXroot", Attrs: attrs, Groups: []Group{{Name: "g", Attrs: attrs[:2],
		Data: []Dataset{{Name: "cube", Shape: []int{3, 5, 70}, Value: values(r, 1050), Attrs: attrs}}}},
		Data: []Dataset{{Name: "text", Value: "hello"}, {Name: "time", Value: []float64{1, 2}},
			{Name: "n", Value: []int64{4}}, {Name: "plane", Shape: []int{40, 900}, Value: make([]float32, 36000)}}}
	var m memory
	if err := Write(context.Background(), &m, g, Options{Workers: 1}); err != nil {
		t.Fatal(err)
	}
	return m.b
}

// resum makes the checksums of all headers true again, so that mutations get
// past them to the parser.
func resum(b []byte) []byte {
	b = bytes.Clone(b)
	put := func(from, to int) {
		if from >= 0 && to+4 <= len(b) && to >= from {
			s := checksum(b[from:to])
			copy(b[to:], []byte{byte(s), byte(s >> 8), byte(s >> 16), byte(s >> 24)})
		}
	}
	if len(b) >= superblockSize {
		n := uint64(len(b))
		for i := range 8 {
			b[28+i] = byte(n >> (8 * i))
		}
		put(0, 44)
	}
	for at := 0; ; {
		i := bytes.Index(b[at:], []byte("OHDR"))
		if i < 0 || at+i+10 > len(b) {
			return b
		}
		at += i
		n := int(b[at+6]) | int(b[at+7])<<8 | int(b[at+8])<<16
		put(at, at+10+n)
		at += 4
	}
}

// FuzzOpen: no bytes make the reader panic or allocate without bound.
func FuzzOpen(f *testing.F) {
	f.Add(small(f))
	f.Add([]byte(signature))
	f.Fuzz(func(t *testing.T, b []byte) {
		readAll(b)
		readAll(resum(b))
	})
}

// TestDamage flips, cuts and repeats bytes of a real file, with the checksums
// left wrong and made right.
func TestDamage(t *testing.T) {
	const seed = 11
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, seed))
	good := small(t)
	for range 1000 {
		b := bytes.Clone(good)
		for range 1 + r.IntN(4) {
			i := r.IntN(len(b))
			switch r.IntN(3) {
			case 0:
				b[i] ^= 1 << r.IntN(8)
			case 1:
				b[i] = []byte{0, 1, 0x7f, 0x80, 0xff}[r.IntN(5)]
			default:
				j := r.IntN(len(b))
				copy(b[i:], b[j:min(len(b), j+1+r.IntN(40))])
			}
		}
		if r.IntN(5) == 0 {
			b = b[:r.IntN(len(b))]
		}
		readAll(b)
		readAll(resum(b))
	}
}

// TestEveryFlip: a flipped bit is noticed or harmless, never a wrong value in
// the cube. Chunks carry Adler-32, headers lookup3; what remains is padding,
// and index fields whose damage leaves the values right.
func TestEveryFlip(t *testing.T) {
	c := demo(t, 2, 3, 5, false)
	good := encode(t, Shot{Cube: c}, 1)
	for i := range good {
		b := bytes.Clone(good)
		b[i] ^= 1 << (i % 8)
		f, err := NewFile(bytes.NewReader(b), int64(len(b)))
		if err != nil {
			continue
		}
		got, err := f.All("entry/data/counts")
		if err == nil && !bitEqual(got, c.Data) {
			t.Fatalf("byte %d flipped: the cube reads wrong without an error", i)
		}
	}
}
