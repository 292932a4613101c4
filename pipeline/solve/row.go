package solve

// The inner loops over rows of the sieve. Products are rounded before they are
// added and sums run from left to right, so that any grouping of taps and any
// vector width gives the same bits.

// set4 is dst[i] = a0·s0[i] + a1·s1[i] + a2·s2[i] + a3·s3[i].
func set4(dst []float32, a0, a1, a2, a3 float32, s0, s1, s2, s3 []float32) {
	n := len(dst)
	s0, s1, s2, s3 = s0[:n], s1[:n], s2[:n], s3[:n]
	for i := range dst {
		dst[i] = float32(a0*s0[i]) + float32(a1*s1[i]) + float32(a2*s2[i]) + float32(a3*s3[i])
	}
}

// add4 is dst[i] += a0·s0[i], then a1·s1[i], a2·s2[i] and a3·s3[i].
func add4(dst []float32, a0, a1, a2, a3 float32, s0, s1, s2, s3 []float32) {
	n := len(dst)
	s0, s1, s2, s3 = s0[:n], s1[:n], s2[:n], s3[:n]
	for i, d := range dst {
		dst[i] = d + float32(a0*s0[i]) + float32(a1*s1[i]) + float32(a2*s2[i]) + float32(a3*s3[i])
	}
}

// add1 is dst[i] += a·s[i].
func add1(dst []float32, a float32, s []float32) {
	s = s[:len(dst)]
	for i, v := range s {
		dst[i] += float32(a * v)
	}
}

// mul is dst[i] *= s[i].
func mul(dst, s []float32) {
	s = s[:len(dst)]
	for i, v := range s {
		dst[i] *= v
	}
}

// fir adds Σ_k a[k]·src[at + k·stride + i] to dst[i]; stride may be negative.
func fir(dst, a, src []float32, at, stride int) {
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

// project is the primal step for a row of coefficients with gradient g:
//
//	v = max(0, z − τ·g);  bar = 2v − z;  z += ρ·(v − z)
func project(z, bar, g, tau []float32) {
	n := len(z)
	bar, g, tau = bar[:n], g[:n], tau[:n]
	for i, old := range z {
		v := old - float32(tau[i]*g[i])
		if !(v > tiny) {
			v = 0
		}
		d := v - old
		z[i], bar[i] = flush(old+float32(relax*d)), v+d
	}
}

// diverge subtracts from g what the differences' duals cast back.
func diverge(g, p, q, qUp, r, rBack []float32, alpha float32) {
	n := len(g)
	p, q, qUp, r, rBack = p[:n], q[:n], qUp[:n], r[:n], rBack[:n]
	var left float32
	for i, v := range g {
		v -= p[i] - left
		left = p[i]
		v -= q[i] - qUp[i]
		g[i] = v - float32(alpha*(r[i]-rBack[i]))
	}
}
