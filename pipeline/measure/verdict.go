package measure

import "fmt"

// The grades of a shot, from best to worst.
const (
	Good     = "good"
	Doubtful = "doubtful"
	Unusable = "unusable"
)

// Reason says why a shot is not simply good.
type Reason struct {
	Code   string  `json:"code"`
	Text   string  `json:"text"`
	Value  float64 `json:"value"`
	Limit  float64 `json:"limit"`
	Unit   string  `json:"unit,omitempty"`
	Remedy string  `json:"remedy"`
}

// Verdict is the grade of a shot with the reasons for it.
type Verdict struct {
	Grade   string   `json:"grade"`
	Reasons []Reason `json:"reasons"`
}

// Limit has a value above which a shot is doubtful and one above which it is
// unusable.
type Limit struct{ Doubtful, Unusable float64 }

// Limits are the bounds of the verdict. The defaults are common practice, no
// source: they mark where a quantity starts to carry a bias that is larger
// than its usual deviation.
type Limits struct {
	// Saturated is the share of lit pixels, per arm, that are saturated.
	// Default 0.002 and 0.05.
	Saturated Limit
	// LightPerPixel is the least mean signal, in photoelectrons per lit
	// streak pixel; below Doubtful the shot is doubtful. Default 5 and 1.
	LightPerPixel Limit
	// Disagreement is how far the arms' total light may differ after the
	// calibrated ratio, as a fraction, beyond three of its deviations.
	// Default 0.05 and 0.3.
	Disagreement Limit
	// Misfit is the reduced chi-square of an arm. Default 1.5 and 5.
	Misfit Limit
	// Outside is the share of light found outside the calibrated time span
	// or window. Default 0.05 and 0.5.
	Outside Limit
}

// Defaults fills every limit that is zero.
func (l Limits) Defaults() Limits {
	def := func(p *Limit, d, u float64) {
		if p.Doubtful == 0 {
			p.Doubtful = d
		}
		if p.Unusable == 0 {
			p.Unusable = u
		}
	}
	def(&l.Saturated, 0.002, 0.05)
	def(&l.LightPerPixel, 5, 1)
	def(&l.Disagreement, 0.05, 0.3)
	def(&l.Misfit, 1.5, 5)
	def(&l.Outside, 0.05, 0.5)
	return l
}

type judge struct{ v Verdict }

func (j *judge) add(grade string, r Reason) {
	j.v.Reasons = append(j.v.Reasons, r)
	if grade == Unusable || j.v.Grade == Good {
		j.v.Grade = grade
	}
}

// above adds a reason when value passes l, and tells whether it did.
func (j *judge) above(value float64, l Limit, r Reason) bool {
	r.Value = value
	switch {
	case value > l.Unusable:
		r.Limit = l.Unusable
		j.add(Unusable, r)
	case value > l.Doubtful:
		r.Limit = l.Doubtful
		j.add(Doubtful, r)
	default:
		return false
	}
	return true
}

// below adds a reason when value falls short of l.
func (j *judge) below(value float64, l Limit, r Reason) {
	r.Value = value
	switch {
	case value < l.Unusable:
		r.Limit = l.Unusable
		j.add(Unusable, r)
	case value < l.Doubtful:
		r.Limit = l.Doubtful
		j.add(Doubtful, r)
	}
}

func (in *Input) verdict() Verdict {
	l := in.Limits.Defaults()
	j := &judge{Verdict{Grade: Good, Reasons: []Reason{}}}
	if in.light(j, l) {
		in.fit(j, l)
	}
	for _, r := range in.Extra {
		j.add(Doubtful, r)
	}
	return j.v
}

// light judges what the frames themselves say and reports whether there is
// enough light for the fit to be judged at all.
func (in *Input) light(j *judge, l Limits) bool {
	for _, a := range []*Arm{&in.Streak, &in.Reference} {
		j.above(a.SaturatedShare, l.Saturated, Reason{Code: "saturated_" + a.Name, Unit: "1",
			Text:   fmt.Sprintf("%s frame saturated in %.2g %% of the lit pixels", a.Name, 100*a.SaturatedShare),
			Remedy: "reduce the light or the gain of the " + a.Name + " camera"})
	}
	if in.Streak.Lit == 0 || in.Reference.Lit == 0 {
		arm := in.Streak.Name
		if in.Streak.Lit > 0 {
			arm = in.Reference.Name
		}
		j.add(Unusable, Reason{Code: "no_light", Unit: "1", Limit: 1,
			Text:   "no light above the noise in the " + arm + " frame",
			Remedy: "check shutter, trigger and delay; look at the raw frame"})
		return false
	}
	per := in.Streak.Light / float64(in.Streak.Lit)
	j.below(per, l.LightPerPixel, Reason{Code: "little_light", Unit: "photoelectrons",
		Text:   fmt.Sprintf("only %.3g photoelectrons per lit streak pixel", per),
		Remedy: "raise the light or the gain before the sensor, or bin the frames"})
	return true
}

func (in *Input) fit(j *judge, l Limits) {
	d, s := in.disagreement()
	if excess := abs(d) - 3*s; excess > 0 {
		// Only what passes three deviations counts, so that a faint shot is
		// not blamed for its own noise.
		if j.above(excess, l.Disagreement, Reason{Code: "arms_disagree", Unit: "1",
			Text:   fmt.Sprintf("arms disagree by %.2g %% in total light", 100*abs(d)),
			Remedy: "check the beam splitter ratio and that nothing clips one arm, or recalibrate"}) {
			j.v.Reasons[len(j.v.Reasons)-1].Value = abs(d)
		}
	}
	if in.Quick {
		return
	}
	for _, a := range []*Arm{&in.Streak, &in.Reference} {
		j.above(a.Misfit, l.Misfit, Reason{Code: "misfit_" + a.Name, Unit: "1",
			Text:   fmt.Sprintf("the cube explains the %s frame badly (reduced chi-square %.3g)", a.Name, a.Misfit),
			Remedy: "look at residual.png; recalibrate if its pattern repeats from shot to shot"})
	}
	j.above(in.OutsideSpan, l.Outside, Reason{Code: "outside_span", Unit: "1",
		Text:   fmt.Sprintf("%.2g %% of the light falls outside the calibrated time span", 100*in.OutsideSpan),
		Remedy: "move the trigger delay, or calibrate a longer span"})
	if !in.Fit.Converged {
		j.add(Doubtful, Reason{Code: "not_converged", Unit: "1", Value: float64(in.Fit.Iterations),
			Limit: float64(in.Fit.Iterations), Text: fmt.Sprintf("the reconstruction had not settled after %d iterations", in.Fit.Iterations),
			Remedy: "run the shot again; if it repeats, the calibration does not describe the frames"})
	}
}

func abs(v float64) float64 {
	if v < 0 {
		return -v
	}
	return v
}
