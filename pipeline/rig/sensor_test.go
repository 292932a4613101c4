package rig

import (
	"math"
	"math/rand/v2"
	"testing"
)

const seedSensor = 41

// stats returns mean and variance.
func stats(v []float64) (mean, variance float64) {
	for _, x := range v {
		mean += x / float64(len(v))
	}
	for _, x := range v {
		variance += (x - mean) * (x - mean) / float64(len(v)-1)
	}
	return mean, variance
}

// TestPoisson: variance equals mean. Bounds are five standard errors of
// 40,000 draws: mean √(λ/n), variance √((2λ² + λ)/n).
func TestPoisson(t *testing.T) {
	const n = 40000
	rng := rand.New(rand.NewPCG(seedSensor, 0))
	for _, lambda := range []float64{0.3, 4, 9.9, 10.1, 80, 3000, 90000} {
		v := make([]float64, n)
		for i := range v {
			v[i] = poisson(lambda, rng)
		}
		mean, variance := stats(v)
		near(t, "mean", mean, lambda, 5*math.Sqrt(lambda/n))
		near(t, "variance", variance, lambda, 5*math.Sqrt((2*lambda*lambda+lambda)/n))
	}
	if poisson(0, rng) != 0 {
		t.Error("light without photons")
	}
}

// TestPhotonTransfer: the slope of temporal variance over mean, both in ADU,
// is the inverse of the gain, the intercept the read and rounding noise (EMVA
// Standard 1288 Release 4.0 Linear, equation 12: σ² = K²σ_d² + σ_q² + K(μ - μ_dark),
// with σ_q² = 1/12).
func TestPhotonTransfer(t *testing.T) {
	sensor := Default().Streak
	sensor.Hot, sensor.Dead = 0, 0
	m := newCamera(sensor, 200, 200, seedSensor, 9)
	rng := rand.New(rand.NewPCG(seedSensor, 1))
	light := m.blank()
	pair := func(level float64) (mean, variance float64) {
		for i := range light {
			light[i] = level
		}
		a, b := m.capture(light, rng), m.capture(light, rng)
		d := make([]float64, len(light))
		for i := range d {
			d[i] = (float64(a.Pix[i]) - float64(b.Pix[i])) / math.Sqrt2
			mean += (float64(a.Pix[i]) + float64(b.Pix[i])) / 2 / float64(len(d))
		}
		_, variance = stats(d)
		return mean, variance
	}
	dark, floor := pair(0)
	near(t, "dark level", dark, 210+4/2.0, 5*1.5/200) // offset and dark signal; 40,000 pixels of pattern 1.5
	// Read noise 3 pe and 4 pe of dark signal at 2 pe/ADU; 5 errors of the
	// variance of 40,000 differences, √(2/n).
	near(t, "dark variance", floor, (9.0+4)/4+1.0/12, 5*math.Sqrt(2.0/40000)*3.4)
	for _, level := range []float64{2000, 20000, 60000} {
		mean, variance := pair(level)
		near(t, "photon transfer slope", (variance-floor)/(mean-dark), 1/sensor.Gain, 5*math.Sqrt(2.0/40000)*1.02/sensor.Gain)
	}
}

func TestSaturation(t *testing.T) {
	for _, c := range []struct {
		name string
		bits int
		well float64
		top  float64 // highest code
	}{
		{"full well", 16, 110000, 110000/2 + 210 + 40}, // 5σ of noise and pattern above the mean
		{"converter", 16, 200000, 65535},
		{"12 bits", 12, 110000, 4095},
	} {
		t.Run(c.name, func(t *testing.T) {
			sensor := Default().Streak
			sensor.Bits, sensor.FullWell = c.bits, c.well
			m := newCamera(sensor, 60, 50, seedSensor, 9)
			light := m.blank()
			for i := range light {
				light[i] = 1.5 * m.full()
			}
			im := m.capture(light, rand.New(rand.NewPCG(seedSensor, 2)))
			var top uint16
			for _, v := range im.Pix {
				top = max(top, v)
			}
			if float64(top) > c.top || float64(top) < 0.99*c.top {
				t.Errorf("highest code %d, want at most %g and near it", top, c.top)
			}
		})
	}
}

func TestDefects(t *testing.T) {
	s := station(t, nil)
	for _, m := range []*camera{s.streak, s.reference} {
		rng := rand.New(rand.NewPCG(seedSensor, 3))
		dark := m.capture(m.blank(), rng)
		light := m.blank()
		for i := range light {
			light[i] = 0.5 * m.full()
		}
		lit := m.capture(light, rng)
		var hot, dead int
		var flat float64
		for i := range light {
			flat += m.flat[i] / float64(len(light))
			if m.hot[i] {
				hot++
				if float64(dark.Pix[i]) < m.Sensor.Offset+0.009*m.FullWell/m.Gain {
					t.Errorf("hot pixel %d reads %d in the dark", i, dark.Pix[i])
				}
			}
			if m.dead[i] && !m.hot[i] {
				dead++
				if float64(lit.Pix[i]) > m.Sensor.Offset+0.2*m.full()/m.Gain {
					t.Errorf("dead pixel %d reads %d in the light", i, lit.Pix[i])
				}
			}
		}
		near(t, "mean flat", flat, 1, float64(m.Dead)/float64(len(light)))
		if hot == 0 || hot > m.Hot || dead == 0 || dead > m.Dead {
			t.Errorf("%d hot and %d dead pixels, want up to %d and %d", hot, dead, m.Hot, m.Dead)
		}
	}
}

func TestBend(t *testing.T) {
	sensor := Default().Streak
	sensor.Bend, sensor.Hot, sensor.Dead, sensor.Vignette, sensor.Speckle = 0.02, 0, 0, 0, 0
	m := newCamera(sensor, 100, 100, seedSensor, 9)
	light := m.blank()
	for i := range light {
		light[i] = 55000
	}
	im := m.capture(light, rand.New(rand.NewPCG(seedSensor, 4)))
	v := make([]float64, len(im.Pix))
	for i, p := range im.Pix {
		v[i] = float64(p)
	}
	mean, _ := stats(v)
	pe := 55004 * (1 - 0.02*55004.0/110000)
	near(t, "bent mean", mean, pe/2+210, 5*math.Sqrt(55000.0/4/10000)+5*1.5/100)
}
