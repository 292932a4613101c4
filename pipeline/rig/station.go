package rig

// Station is a simulated station. It is safe for concurrent use: nothing
// changes after New.
type Station struct {
	o                 Options
	sweep             curve
	pattern           pattern
	code              []float64 // fine grid
	homography        [9]float64
	streak, reference *camera
}

// New builds a station from options.
func New(o Options) (*Station, error) {
	if err := o.Validate(); err != nil {
		return nil, err
	}
	s := &Station{o: o, sweep: o.curve(), pattern: newPattern(o), homography: o.registration()}
	s.code = s.transmission(0, 0)
	s.streak = newCamera(o.Streak, o.WindowX+o.W+o.Margin, o.WindowY+o.H+o.T+o.Margin, o.Seed, streamStreak)
	s.reference = newCamera(o.Reference, o.View.SensorW, o.View.SensorH, o.Seed, streamReference)
	return s, nil
}

// Options returns the options the station was built from.
func (s *Station) Options() Options { return s.o }

// Streak describes the streak sensor, in the turned frame.
func (s *Station) Streak() Camera { return s.streak.show() }

// Reference describes the reference sensor.
func (s *Station) Reference() Camera { return s.reference.show() }

// blank returns an unlit sensor.
func (m *camera) blank() []float64 { return make([]float64, m.w*m.h) }
