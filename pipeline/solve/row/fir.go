package row

// reach checks that taps rows of n elements, stride apart from src[at], lie
// inside src, and returns where the first begins.
func reach(src []float32, at, stride, taps, n int) *float32 {
	last := at + (taps-1)*stride
	_, _ = src[at:at+n], src[last:last+n]
	return &src[at]
}

// Fir adds Σ_k a[k]·src[at + k·stride + i] to dst[i], from left to right;
// stride may be negative. dst must not overlap src.
func (l Lanes) Fir(dst, a, src []float32, at, stride int) {
	if len(dst) == 0 || len(a) == 0 {
		return
	}
	first := reach(src, at, stride, len(a), len(dst))
	if l.wide {
		firAdd(&dst[0], len(dst), &a[0], len(a), first, 4*stride)
		return
	}
	firPlain(dst, a, src, at, stride)
}

// FirSet writes 0 + Σ_k a[k]·src[at + k·stride + i] to dst[i].
func (l Lanes) FirSet(dst, a, src []float32, at, stride int) {
	if len(dst) == 0 || len(a) == 0 {
		clear(dst)
		return
	}
	first := reach(src, at, stride, len(a), len(dst))
	if l.wide {
		firSet(&dst[0], len(dst), &a[0], len(a), first, 4*stride)
		return
	}
	clear(dst)
	firPlain(dst, a, src, at, stride)
}

// FirMul writes (0 + Σ_k a[k]·src[at + k·stride + i])·by[i] to dst[i].
func (l Lanes) FirMul(dst, a, src []float32, at, stride int, by []float32) {
	by = by[:len(dst)]
	if len(dst) == 0 || len(a) == 0 {
		clear(dst)
		mul(dst, by)
		return
	}
	first := reach(src, at, stride, len(a), len(dst))
	if l.wide {
		firMul(&dst[0], len(dst), &a[0], len(a), first, 4*stride, &by[0])
		return
	}
	clear(dst)
	firPlain(dst, a, src, at, stride)
	mul(dst, by)
}

// Add is dst[i] += a·s[i].
func (l Lanes) Add(dst []float32, a float32, s []float32) {
	s = s[:len(dst)]
	if l.wide && len(dst) > 0 {
		firAdd(&dst[0], len(dst), &a, 1, &s[0], 0)
		return
	}
	add1(dst, a, s)
}

// firPlain takes four taps at a time, which changes no bit.
func firPlain(dst, a, src []float32, at, stride int) {
	n := len(dst)
	row := func(k int) []float32 { return src[at+k*stride:][:n] }
	k := 0
	for ; k+4 <= len(a); k += 4 {
		add4(dst, a[k], a[k+1], a[k+2], a[k+3], row(k), row(k+1), row(k+2), row(k+3))
	}
	for ; k < len(a); k++ {
		add1(dst, a[k], row(k))
	}
}

func add4(dst []float32, a0, a1, a2, a3 float32, s0, s1, s2, s3 []float32) {
	n := len(dst)
	s0, s1, s2, s3 = s0[:n], s1[:n], s2[:n], s3[:n]
	for i, d := range dst {
		dst[i] = d + float32(a0*s0[i]) + float32(a1*s1[i]) + float32(a2*s2[i]) + float32(a3*s3[i])
	}
}

func add1(dst []float32, a float32, s []float32) {
	s = s[:len(dst)]
	for i, v := range s {
		dst[i] += float32(a * v)
	}
}

func mul(dst, s []float32) {
	s = s[:len(dst)]
	for i, v := range s {
		dst[i] *= v
	}
}
