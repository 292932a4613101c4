package solve

// hold is the part of an arm's pixels that a fit is not shown.
type hold struct {
	at         []int
	data, vari []float32
}

// holdShare is the share of the pixels left out for validation, one in so
// many.
const holdShare = 10

// hide masks a fixed pseudo-random tenth of the usable pixels: those whose
// index, hashed (Knuth's multiplicative hash, TAOCP 3, 6.4), falls in the
// first tenth.
func (a *arm) hide() (h hold) {
	for j, v := range a.vari {
		if v > 0 && uint32(j)*2654435769>>8%holdShare == 0 {
			h.at = append(h.at, j)
			h.data = append(h.data, a.data[j])
			h.vari = append(h.vari, v)
			a.data[j], a.vari[j], a.dual[j] = 0, -1, 0
			a.used--
		}
	}
	return h
}

// show gives the pixels back.
func (a *arm) show(h hold) {
	for n, j := range h.at {
		a.data[j], a.vari[j] = h.data[n], h.vari[n]
		a.used++
	}
}

// miss returns the χ² of the hidden pixels.
func (a *arm) miss(h hold) (chi float64) {
	for n, j := range h.at {
		d := float64(a.now[j] - h.data[n])
		chi += float64(d*d) / float64(h.vari[n])
	}
	return chi
}
