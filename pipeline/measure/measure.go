package measure

import (
	"fmt"
	"math"

	"unsheard/pipeline/cube"
)

// SpeedOfLight is c in metres per second, exact by definition (SI Brochure,
// 9th edition, 2019, section 2.2: 299 792 458 m/s).
const SpeedOfLight = 299792458.0

// Arm holds what is known of one arm's frame after correction and fit.
type Arm struct {
	Name           string  // "streak" or "reference"
	Light          float64 // measured photoelectrons over the usable pixels
	LightSigma     float64 // one deviation of Light
	Lit            int     // pixels above the noise
	Usable         int     // pixels with a weight
	SaturatedShare float64 // saturated / lit
	Misfit         float64 // reduced chi-square of the fit
}

// Fit holds the figures of the reconstruction.
type Fit struct {
	Converged  bool
	Iterations int
	Lambda     float64
	Alpha      float64
}

// Input is everything Measure reads.
type Input struct {
	Cube              *cube.Cube
	Streak, Reference Arm

	// Expected is the light that the streak arm should have measured given
	// the reference frame, the ratio and the code alone, photoelectrons;
	// ExpectedSigma is one deviation. 0: not known.
	Expected, ExpectedSigma float64

	// Transmission is the mean of the code, 0..1.
	Transmission float64

	// ScaleSigma is one deviation of Cube.Scale, µm per pixel.
	ScaleSigma float64

	// OutsideSpan is the share of light in frames outside the reported span.
	OutsideSpan float64

	Fit    Fit
	Limits Limits

	// Quick says that the cube is a quick look: coarse pixels do not explain
	// the frames to within their noise and it stops before it has settled, so
	// neither counts against the shot.
	Quick bool

	// Extra holds reasons found elsewhere (pairing, bundle); each makes the
	// shot doubtful.
	Extra []Reason
}

// Measure computes all quantities and the verdict. It returns an error only
// if the cube is inconsistent.
func Measure(in Input) (*Report, error) {
	if err := in.Cube.Check(); err != nil {
		return nil, fmt.Errorf("measure: %w", err)
	}
	r := &Report{Quantities: map[string]Quantity{}, Curves: map[string]Curve{}}
	in.totals(r)
	in.curve(r)
	in.motion(r)
	r.Verdict = in.verdict()
	return r, nil
}

func (in *Input) disagreement() (d, sigma float64) {
	if in.Expected <= 0 {
		return 0, 0
	}
	q := in.Streak.Light / in.Expected
	return q - 1, q * math.Hypot(ratio(in.Streak.LightSigma, in.Streak.Light), ratio(in.ExpectedSigma, in.Expected))
}

func ratio(a, b float64) float64 {
	if b == 0 {
		return 0
	}
	return a / b
}

func (in *Input) totals(r *Report) {
	const direct = "sum over the corrected frame"
	r.set("streak_light", in.Streak.Light, in.Streak.LightSigma, "photoelectrons", direct)
	r.set("reference_light", in.Reference.Light, in.Reference.LightSigma, "photoelectrons", direct)
	total := in.Cube.Total()
	r.set("total_light", total, math.Sqrt(total/in.transmission()), "photoelectrons",
		"sum over the cube; deviation of counting alone")
	if in.Expected > 0 {
		d, s := in.disagreement()
		r.set("arms_ratio", 1+d, s, "1",
			"streak light over the light expected from the reference frame, the calibrated ratio and the code")
	}
	r.set("misfit_streak", in.Streak.Misfit, chiSigma(in.Streak.Usable), "1", "reduced chi-square")
	r.set("misfit_reference", in.Reference.Misfit, chiSigma(in.Reference.Usable), "1", "reduced chi-square")
	r.set("saturated_streak", in.Streak.SaturatedShare, unknown, "1", "saturated over lit pixels")
	r.set("saturated_reference", in.Reference.SaturatedShare, unknown, "1", "saturated over lit pixels")
	r.set("outside_span", in.OutsideSpan, unknown, "1", "light in frames outside the calibrated span over all light")
}

// chiSigma is the deviation of a reduced chi-square of n degrees of freedom,
// √(2/n).
func chiSigma(n int) float64 {
	if n == 0 {
		return unknown
	}
	return math.Sqrt(2 / float64(n))
}

func (in *Input) transmission() float64 {
	if in.Transmission > 0 {
		return in.Transmission
	}
	return 1
}
