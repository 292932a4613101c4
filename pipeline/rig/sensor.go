package rig

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/stat/distuv"
)

// Streams of the seeded generators, so that no two parts share numbers.
const (
	streamCode = iota + 1
	streamStreak
	streamReference
	streamTarget
	streamScene
	streamShot
	streamSeries
	streamCampaign
)

// cellWidth adds the variance of a cell's own extent to a blur, px.
func cellWidth(sigma float64) float64 {
	return math.Sqrt(sigma*sigma + 1.0/(sub*sub*12))
}

// camera is one sensor with its fixed imperfections.
type camera struct {
	Sensor
	w, h   int
	flat   []float64 // response, mean 1 over the sensor
	offset []float64 // ADU
	dark   []float64 // photoelectrons per exposure
	hot    []bool
	dead   []bool
}

func newCamera(c Sensor, w, h int, seed, stream uint64) *camera {
	rng := rand.New(rand.NewPCG(seed, stream))
	n := w * h
	m := &camera{Sensor: c, w: w, h: h, flat: make([]float64, n), offset: make([]float64, n),
		dark: make([]float64, n), hot: make([]bool, n), dead: make([]bool, n)}
	var sum float64
	for y := range h {
		for x := range w {
			i := y*w + x
			// Off-centre vignetting, fourth power at the edge, and speckle.
			u, v := (float64(x)/float64(w)-0.47)/0.5, (float64(y)/float64(h)-0.53)/0.5
			r2 := (u*u + v*v) / 2
			m.flat[i] = (1 - c.Vignette*(0.7*r2+0.3*r2*r2)) * (1 + c.Speckle*rng.NormFloat64())
			m.offset[i] = c.Offset + c.Pattern*rng.NormFloat64()
			m.dark[i] = c.Dark
			sum += m.flat[i]
		}
	}
	for i := range m.flat {
		m.flat[i] *= float64(n) / sum
	}
	for range c.Hot {
		i := rng.IntN(n)
		m.hot[i] = true
		m.dark[i] += (0.01 + 0.1*rng.Float64()) * c.FullWell
	}
	for range c.Dead {
		i := rng.IntN(n)
		m.dead[i] = true
		m.flat[i] *= 0.3 * rng.Float64()
	}
	return m
}

// capture turns the light falling on the sensor, photoelectrons per pixel of
// a flat of 1, into a frame.
func (m *camera) capture(light []float64, rng *rand.Rand) Image {
	im := Image{W: m.w, H: m.h, Pix: make([]uint16, len(light))}
	top := float64(int(1)<<m.Bits - 1)
	for i, v := range light {
		pe := poisson(v*m.flat[i]+m.dark[i], rng)
		pe = min(pe, m.FullWell)
		pe *= 1 - m.Bend*pe/m.FullWell
		pe += m.ReadNoise * rng.NormFloat64()
		adu := math.Round(pe/m.Gain + m.offset[i])
		im.Pix[i] = uint16(min(max(adu, 0), top))
	}
	return im
}

// poisson draws a count of the given mean.
func poisson(mean float64, rng *rand.Rand) float64 {
	if mean <= 0 {
		return 0
	}
	return distuv.Poisson{Lambda: mean, Src: rng}.Rand()
}

// Camera describes one simulated sensor; arrays are row-major in the turned
// frame and shared with the station: do not write to them.
type Camera struct {
	Sensor
	W, H   int
	Flat   []float64 // response, mean 1 without dead pixels
	Offset []float64 // ADU
	Hot    []bool
	Dead   []bool
}

func (m *camera) show() Camera {
	return Camera{Sensor: m.Sensor, W: m.w, H: m.h, Flat: m.flat, Offset: m.offset, Hot: m.hot, Dead: m.dead}
}
