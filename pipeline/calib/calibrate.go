package calib

import (
	"context"
	"errors"
	"fmt"
	"math"
	"time"

	"unsheard/pipeline/frame"
)

// Options of a calibration.
type Options struct {
	// Limits bounds the frame files; zero values mean the defaults of
	// package frame.
	Limits frame.Limits

	// Now is the time written into the bundle; zero means the present.
	Now time.Time

	// Progress, if not nil, is called before each step.
	Progress func(step string)
}

// Report is how every part of a bundle was found.
type Report struct {
	Streak, Reference *ArmFit
	Code              *CodeFit
	Register          *RegisterFit
	Sweep             *SweepFit

	EvenRatio, TargetRatio Quantity
	Outside                float64 // light of the open frames outside the window, part of the window's pixels
}

// Calibrate turns a series into a bundle. It refuses a series from which no
// usable bundle can be made and says what to change.
func Calibrate(ctx context.Context, s *Series, o Options) (*Bundle, *Report, error) {
	if o.Now.IsZero() {
		o.Now = time.Now().Truncate(time.Second)
	}
	c := &calibration{ctx: ctx, s: s, o: o, r: &Report{}, b: &Bundle{
		Station: s.Station, Direction: s.Direction, Created: o.Now, ValidFrom: s.ValidFrom, ValidUntil: s.ValidUntil,
		Warnings: append([]string(nil), s.Warnings...),
	}}
	c.streak = &loader{ctx: ctx, arm: "streak", direction: s.Direction, limits: o.Limits}
	c.reference = &loader{ctx: ctx, arm: "reference", direction: "down", limits: o.Limits}
	for _, step := range []struct {
		name string
		run  func() error
	}{
		{"arms", c.arms}, {"window and code", c.code}, {"registration", c.register},
		{"sweep", c.sweep}, {"report", c.close},
	} {
		if o.Progress != nil {
			o.Progress(step.name)
		}
		if err := ctx.Err(); err != nil {
			return nil, nil, fmt.Errorf("calibrate station %q: %w", s.Station, err)
		}
		if err := step.run(); err != nil {
			return nil, nil, fmt.Errorf("calibrate station %q: %w", s.Station, err)
		}
	}
	return c.b, c.r, nil
}

type calibration struct {
	ctx               context.Context
	s                 *Series
	o                 Options
	b                 *Bundle
	r                 *Report
	streak, reference *loader
	open              image
	openStack         *stack
}

func (c *calibration) warn(w ...string) { c.b.Warnings = append(c.b.Warnings, w...) }

func (c *calibration) arms() error {
	a, f, err := measureArm(c.streak, &c.s.Streak, [][]string{c.s.Open, c.s.Coded, c.s.TargetStreak})
	if err != nil {
		return err
	}
	c.b.Streak, c.r.Streak = *a, f
	c.warn(f.Warnings...)
	a, f, err = measureArm(c.reference, &c.s.Reference, [][]string{c.s.Even, c.s.TargetReference})
	if err != nil {
		return err
	}
	c.b.Reference, c.r.Reference = *a, f
	c.warn(f.Warnings...)
	return nil
}

// saturatedMost is the part of the lit pixels that may be saturated.
const saturatedMost = 0.05

// image averages frames, corrects them and holds them to little saturation.
func (c *calibration) image(l *loader, a *Arm, paths []string, what string) (image, *stack, error) {
	st, err := l.stack(paths)
	if err != nil {
		return image{}, nil, err
	}
	im := a.correct(st)
	lit, full := 0, 0
	level := plateau(im)
	for i, v := range st.top {
		switch {
		case a.Bad[i]:
		case a.Saturation.Value > 0 && v >= a.Saturation.Value:
			full++
			lit++
		case im.v[i] > level/2:
			lit++
		}
	}
	share := float64(full) / float64(max(lit, 1))
	if share > saturatedMost {
		return image{}, nil, fmt.Errorf("the %s frames of the %s arm (%q) are saturated in %.0f %% of the lit pixels: reduce the light or the exposure", what, l.arm, paths[0], 100*share)
	}
	if share > 0.001 {
		c.warn(fmt.Sprintf("the %s frames of the %s arm are saturated in %.1f %% of the lit pixels, which are left out", what, l.arm, 100*share))
	}
	return im, st, nil
}

func (c *calibration) code() error {
	var err error
	if c.open, c.openStack, err = c.image(c.streak, &c.b.Streak, c.s.Open, "open"); err != nil {
		return err
	}
	coded, _, err := c.image(c.streak, &c.b.Streak, c.s.Coded, "coded")
	if err != nil {
		return err
	}
	if w := c.s.Window; w != nil {
		if w.W > c.open.w-w.X || w.H > c.open.h-w.Y {
			return fmt.Errorf("[window] %d×%d px at (%d, %d) does not lie on the turned %d×%d streak sensor", w.W, w.H, w.X, w.Y, c.open.w, c.open.h)
		}
		c.b.Window = *w
		c.warn("the window was set by hand")
	} else if c.b.Window, c.r.Outside, err = findWindow(c.open); err != nil {
		return fmt.Errorf("find the window in %q: %w", c.s.Open[0], err)
	}
	if c.r.Outside > litOutside {
		c.warn(fmt.Sprintf("the open frames are also lit outside the window (%.0f %% of its pixels): stray light, or the window is no rectangle", 100*c.r.Outside))
	}
	if err := c.inside(coded, c.s.Coded[0], "coded"); err != nil {
		return err
	}
	f, warn, err := fitCode(coded, c.open, c.b.Window)
	if err != nil {
		return fmt.Errorf("code from %q: %w", c.s.Coded[0], err)
	}
	c.warn(warn...)
	c.r.Code = f
	c.b.Code = make([]float32, len(f.code.v))
	for i, v := range f.code.v {
		c.b.Code[i] = float32(v)
	}
	a := &c.b.Streak
	a.OpticalX = Quantity{f.sigma[0], f.error[0], "px", f.method[0]}
	a.OpticalY = Quantity{f.sigma[1], f.error[1], "px", f.method[1]}
	a.BlurX, a.BlurY = a.OpticalX, a.OpticalY
	if f.model != f.sigma {
		const less = "; less the box that a code off the pixel grid adds by its average over pixels"
		a.BlurX.Value, a.BlurX.Method = f.model[0], f.method[0]+less
		a.BlurY.Value, a.BlurY.Method = f.model[1], f.method[1]+less
	}
	a.Floor = min(math.Hypot(f.floor, c.r.Streak.FlatNoise), floorMost)
	return nil
}

// inside refuses frames whose light reaches beyond the window.
func (c *calibration) inside(im image, file, what string) error {
	if n := overhang(im, c.b.Window); n > overhangMost {
		return fmt.Errorf("the %s frames of the streak arm (%q) are lit %d px beyond the window of the open frames (%q): check that neither are frames of the other arm and that the sweep was off", what, file, n, c.s.Open[0])
	}
	return nil
}

// floorMost bounds the model-error floor: beyond it the bundle is wrong
// rather than imprecise.
const floorMost = 0.05

func (c *calibration) register() error {
	b := c.b
	s, sst, err := c.image(c.streak, &b.Streak, c.s.TargetStreak, "target")
	if err != nil {
		return err
	}
	r, rst, err := c.image(c.reference, &b.Reference, c.s.TargetReference, "target")
	if err != nil {
		return err
	}
	if err := c.inside(s, c.s.TargetStreak[0], "target"); err != nil {
		return err
	}
	sigma := [2]float64{b.Streak.OpticalX.Value, b.Streak.OpticalY.Value}
	in := s.crop(b.Window)
	f, warn, err := register(c.ctx, in, r, sigma)
	if err != nil {
		return fmt.Errorf("registration from %q and %q: %w", c.s.TargetStreak[0], c.s.TargetReference[0], err)
	}
	c.warn(warn...)
	c.r.Register = f
	b.Registration, b.RegistrationKind, b.RegistrationResidual = f.H, f.Kind, f.Residual
	a := &b.Reference
	side := 1 / math.Sqrt(math.Abs(f.H[0]*f.H[4]-f.H[1]*f.H[3])) // of a reference pixel, window px
	how := fmt.Sprintf("optics %%.3f px (equal blur of both targets, correlation %.5f), less the box that the forward model adds", f.Rho)
	a.OpticalX = Quantity{f.Optical[0], f.Sigma[0], "px", "equal blur of both targets"}
	a.OpticalY = Quantity{f.Optical[1], f.Sigma[1], "px", "equal blur of both targets"}
	a.BlurX = Quantity{modelBlur(f.Optical[0], side), f.Sigma[0], "px", fmt.Sprintf(how, f.Optical[0])}
	a.BlurY = Quantity{modelBlur(f.Optical[1], side), f.Sigma[1], "px", fmt.Sprintf(how, f.Optical[1])}
	a.Floor = min(math.Hypot(f.Floor, c.r.Reference.FlatNoise), floorMost)
	return c.ratio(in, r, sst, rst)
}

func (c *calibration) ratio(target, reference image, sst, rst *stack) error {
	b := c.b
	inset := min(int(math.Ceil(3*max(b.Streak.OpticalX.Value, b.Streak.OpticalY.Value)+
		3*max(b.Reference.OpticalX.Value, b.Reference.OpticalY.Value)))+1, b.Window.W/4, b.Window.H/4)
	find := func(s, r image, ss, rs *stack, name string) Quantity {
		q, e, n := flux(s, r, b.Registration, inset)
		e = math.Hypot(e, q*math.Hypot(drift(ss, b.Streak.level()), drift(rs, b.Reference.level())))
		return Quantity{q, e, "1", fmt.Sprintf("light of both arms over %d window pixels of the %s frames; errors of the two gains cancel as long as both are used together and are not included", n, name)}
	}
	var even Quantity
	if len(c.s.Even) > 0 {
		r, rs, err := c.image(c.reference, &b.Reference, c.s.Even, "even light")
		if err != nil {
			return err
		}
		if even = find(c.open.crop(b.Window), r, c.openStack, rs, "open"); !(even.Value > 0) {
			return fmt.Errorf("the even-light frames of the reference arm (%q) are dark where the window lies: check that the reference arm was exposed during the open frames", c.s.Even[0])
		}
	}
	c.r.EvenRatio, c.r.TargetRatio = even, find(target, reference, sst, rst, "target")
	var warn []string
	var err error
	b.Ratio, warn, err = findRatio(even, c.r.TargetRatio)
	c.warn(warn...)
	return err
}

// level is the mean dark level, ADU.
func (a *Arm) level() (m float64) {
	for _, v := range a.Dark {
		m += float64(v) / float64(len(a.Dark))
	}
	return m
}

func (c *calibration) sweep() error {
	b := c.b
	var frames []moved
	for _, d := range c.s.Delays {
		im, _, err := c.image(c.streak, &b.Streak, d.Frames, fmt.Sprintf("%g ps", d.PS))
		if err != nil {
			return err
		}
		frames = append(frames, moved{ps: d.PS, im: im})
	}
	if len(c.s.Still) > 0 {
		im, _, err := c.image(c.streak, &b.Streak, c.s.Still, "still")
		if err != nil {
			return err
		}
		frames = append(frames, moved{ps: math.NaN(), im: im})
	}
	s, f, warn, err := calibrateSweep(frames, c.s.Direction, b.Window)
	if err != nil {
		return fmt.Errorf("sweep: %w", err)
	}
	c.warn(warn...)
	b.Sweep, c.r.Sweep = *s, f
	b.First, b.Frames, warn, err = s.frameGrid(b.Window, b.Streak.H)
	c.warn(warn...)
	if err != nil {
		return fmt.Errorf("sweep: %w", err)
	}
	return nil
}

func (c *calibration) close() error {
	b := c.b
	b.Scale = Quantity{c.s.Scale, 0, "µm/px", "given in the series"}
	if c.s.Scale == 0 {
		b.Scale.Method = "not given"
	}
	if err := b.Validate(); err != nil {
		return errors.Join(errors.New("the result is not a usable bundle"), err)
	}
	var err error
	b.report, err = c.r.HTML(b)
	return err
}
