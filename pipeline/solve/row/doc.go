// Package row holds the innermost loops of the reconstruction: they work along
// rows of float32 images, each in a plain version and, on amd64 processors
// that have it, in AVX2 (written by rowgen, next door).
//
// Both give the same bits. A product is rounded before it is added (no fused
// multiply-add, which the explicit conversions in the plain loops forbid to
// the compiler, too), every element is summed in the same order, one element
// never shares its sum between lanes, and denormals are kept. Only the payload
// of a NaN may differ. So the plain loops are at once the fallback and the
// exact oracle of the tests.
//
// Nothing here allocates, locks or depends on the number of goroutines.
// Slices are checked: one too short is a panic as for any slice.
//
//go:generate go run -C ../rowgen . -out ../row/row_amd64.s -stubs ../row/row_amd64.go -pkg row
package row

// Lanes says which version runs. The zero value is the plain one.
type Lanes struct{ wide bool }

// detected is what the processor has; it is set once and only read.
var detected = avx2()

// Best returns the fastest version this processor has.
func Best() Lanes { return Lanes{wide: detected} }

// String names the version.
func (l Lanes) String() string {
	if l.wide {
		return "avx2"
	}
	return "scalar"
}
