package nexus

import (
	"context"
	"fmt"
	"io"
	"strings"
	"time"
	"unicode/utf16"

	"unsheard/pipeline/cube"
)

// Shot is a reconstructed shot with all that its file carries.
type Shot struct {
	Title   string
	Start   time.Time // of the shot; zero: left out
	Program string    // name of the program that reconstructed
	Version string    // its version
	Made    time.Time // of the reconstruction; zero: left out
	Note    string    // parameters of the reconstruction, plain text or JSON

	Cube   *cube.Cube
	Frames []Frame

	// Provenance is a JSON text; nil leaves it out. Its characters beyond
	// ASCII are written as \u escapes.
	Provenance []byte

	// Bits is the number of mantissa bits kept of counts and their errors;
	// 0 keeps all. See Dataset.
	Bits int
}

// Frame is what one arm saw and what the cube predicts, photoelectrons.
// Model and Variance may be nil.
type Frame struct {
	Arm                   string // streak or reference
	W, H                  int
	Data, Model, Variance []float32
}

// WriteShot writes the shot's NeXus file from w's beginning.
func WriteShot(ctx context.Context, w io.WriteSeeker, s Shot, o Options) error {
	root, err := s.Tree()
	if err != nil {
		return err
	}
	return Write(ctx, w, root, o)
}

// Tree lays the shot out: NXentry with the cube as default NXdata, the
// process that made it, the instrument's frames and the provenance.
func (s *Shot) Tree() (Group, error) {
	if err := s.Cube.Check(); err != nil {
		return Group{}, err
	}
	entry := Group{Name: "entry", Class: "NXentry",
		Attrs: []Attr{{"default", "data"}},
		Data:  []Dataset{plain("title", s.Title)},
	}
	if !s.Start.IsZero() {
		entry.Data = append(entry.Data, Dataset{Name: "start_time", Value: stamp(s.Start)})
	}
	entry.Groups = append(entry.Groups, s.data(), s.process())
	if len(s.Frames) > 0 {
		g, err := s.instrument()
		if err != nil {
			return Group{}, err
		}
		entry.Groups = append(entry.Groups, g)
	}
	if s.Provenance != nil {
		entry.Groups = append(entry.Groups, Group{Name: "provenance", Class: "NXnote", Data: []Dataset{
			{Name: "type", Value: "application/json"},
			{Name: "description", Value: "inputs, calibration and settings this cube came from"},
			{Name: "data", Value: ASCII(string(s.Provenance))},
		}})
	}
	root := Group{Class: "NXroot", Attrs: []Attr{{"default", "entry"}}, Groups: []Group{entry}}
	if s.Program != "" {
		root.Attrs = append(root.Attrs, Attr{"creator", s.Program}, Attr{"creator_version", s.Version})
	}
	return root, nil
}

// plain is a text that Octave, too, can load: it knows ASCII strings only. A
// text beyond ASCII is written escaped and stands as it is in an attribute.
func plain(name, s string) Dataset {
	d := Dataset{Name: name, Value: ASCII(s)}
	if !ascii(s) && len(s) < maxMessage/2 {
		d.Attrs = []Attr{{"utf8", s}}
	}
	return d
}

// stamp is ISO 8601 as NX_DATE_TIME wants it.
func stamp(t time.Time) string { return t.Format("2006-01-02T15:04:05.000000Z07:00") }

func (s *Shot) data() Group {
	c := s.Cube
	shape := []int{c.T, c.H, c.W}
	units, step := "pixel", 1.0
	if c.Scale > 0 {
		units, step = "um", c.Scale
	}
	g := Group{Name: "data", Class: "NXdata",
		Attrs: []Attr{
			{"signal", "counts"}, {"axes", []string{"time", "y", "x"}},
			{"time_indices", 0}, {"y_indices", 1}, {"x_indices", 2},
			{"title", "reconstructed light"},
		},
		Data: []Dataset{
			{Name: "counts", Shape: shape, Value: c.Data, Bits: s.Bits, Attrs: []Attr{
				{"units", "counts"}, {"interpretation", "image"},
				{"long_name", "photoelectrons per window pixel and frame"}}},
			{Name: "time", Value: c.Time, Attrs: []Attr{
				{"units", "ps"}, {"long_name", "time, frame centre (ps)"}}},
			{Name: "time_edges", Value: c.Edges, Attrs: []Attr{
				{"units", "ps"}, {"long_name", "frame limits (ps)"}}},
			axis("y", "down", c.H, step, units), axis("x", "right", c.W, step, units),
		}}
	if s.Bits > 0 && s.Bits < 23 {
		d := &g.Data[0]
		d.Attrs = append(d.Attrs, Attr{"mantissa_bits", s.Bits})
	}
	if c.Errors != nil {
		g.Data = append(g.Data, Dataset{Name: "counts_errors", Shape: shape, Value: c.Errors, Bits: s.Bits,
			Attrs: []Attr{{"units", "counts"}, {"long_name", "one standard deviation of counts"}}})
	}
	return g
}

func axis(name, toward string, n int, step float64, units string) Dataset {
	v := make([]float64, n)
	for i := range v {
		v[i] = float64(i) * step
	}
	return Dataset{Name: name, Value: v, Attrs: []Attr{
		{"units", units}, {"long_name", fmt.Sprintf("%s, pixel centre, from the first one %s (%s)", name, toward, units)}}}
}

func (s *Shot) process() Group {
	g := Group{Name: "reconstruction", Class: "NXprocess", Data: []Dataset{
		plain("program", s.Program),
		plain("version", s.Version),
	}}
	if !s.Made.IsZero() {
		g.Data = append(g.Data, Dataset{Name: "date", Value: stamp(s.Made)})
	}
	if s.Note != "" {
		g.Groups = []Group{{Name: "note", Class: "NXnote", Data: []Dataset{
			{Name: "type", Value: "text/plain"},
			{Name: "description", Value: "parameters of the reconstruction"},
			plain("data", s.Note),
		}}}
	}
	return g
}

func (s *Shot) instrument() (Group, error) {
	g := Group{Name: "instrument", Class: "NXinstrument"}
	for _, f := range s.Frames {
		d := Group{Name: f.Arm, Class: "NXdetector"}
		add := func(name, long, units string, v []float32) error {
			if v == nil {
				return nil
			}
			if len(v) != f.W*f.H || f.W <= 0 || f.H <= 0 {
				return fmt.Errorf("%s frame %d×%d: %s has %d values", f.Arm, f.W, f.H, name, len(v))
			}
			d.Data = append(d.Data, Dataset{Name: name, Shape: []int{f.H, f.W}, Value: v, Attrs: []Attr{
				{"units", units}, {"interpretation", "image"}, {"long_name", long}}})
			return nil
		}
		for _, err := range []error{
			add("data", "measured photoelectrons per pixel", "counts", f.Data),
			add("model", "photoelectrons per pixel predicted from the cube", "counts", f.Model),
			add("variance", "variance of the measured photoelectrons; not positive where masked", "counts^2", f.Variance),
		} {
			if err != nil {
				return Group{}, err
			}
		}
		g.Groups = append(g.Groups, d)
	}
	return g, nil
}

// ASCII replaces every character beyond ASCII by its \u escape, surrogate
// pairs included, which leaves a JSON text the same value. Bytes that are not
// UTF-8 become U+FFFD.
func ASCII(s string) string {
	if ascii(s) {
		return s
	}
	var b strings.Builder
	for _, r := range s {
		switch {
		case r < 0x80:
			b.WriteRune(r)
		case r < 0x10000:
			fmt.Fprintf(&b, `\u%04x`, r)
		default:
			hi, lo := utf16.EncodeRune(r)
			fmt.Fprintf(&b, `\u%04x\u%04x`, hi, lo)
		}
	}
	return b.String()
}
