package rig

import (
	"math"
	"math/rand/v2"
)

// card is the structured target of the calibration series: discs and bars of
// different brightness on a gray ground, different everywhere.
type card struct {
	disc [][4]float64 // x, y, radius, brightness
	bar  [][5]float64 // x, y, half length, half width, angle
}

func newCard(o Options) card {
	rng := rand.New(rand.NewPCG(o.Seed, streamTarget))
	var c card
	w, h := float64(o.W), float64(o.H)
	place := func() (x, y float64) {
		return (rng.Float64()*1.3 - 0.15) * w, (rng.Float64()*1.3 - 0.15) * h
	}
	for range int(w*h/45) + 4 {
		x, y := place()
		c.disc = append(c.disc, [4]float64{x, y, 1.2 + 3*rng.Float64(), 0.25 + 0.75*rng.Float64()})
	}
	for range int(w*h/220) + 2 {
		x, y := place()
		c.bar = append(c.bar, [5]float64{x, y, 3 + 6*rng.Float64(), 0.8 + rng.Float64(), math.Pi * rng.Float64()})
	}
	return c
}

// at returns the brightness, 0 to 1: bars are dark and lie on the discs.
func (c card) at(x, y float64) float64 {
	for _, b := range c.bar {
		sin, cos := math.Sincos(b[4])
		u, v := x-b[0], y-b[1]
		if math.Abs(u*cos+v*sin) < b[2] && math.Abs(v*cos-u*sin) < b[3] {
			return 0.04
		}
	}
	for _, d := range c.disc {
		if math.Hypot(x-d[0], y-d[1]) < d[2] {
			return d[3]
		}
	}
	return 0.12
}
