package export

import (
	_ "embed"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"

	"unsheard/pipeline/measure"
)

//go:embed schema/metrics.schema.json
var schema []byte

// SchemaID names the schema of metrics.json.
const SchemaID = "urn:unsheard:schema:metrics:1"

// Schema returns the JSON Schema (draft 2020-12) of metrics.json.
func Schema() []byte { return append([]byte(nil), schema...) }

// maxMetrics bounds a metrics file that is read: curves of a few thousand
// frames take a megabyte.
const maxMetrics = 64 << 20

// number is a float64 that JSON can hold: NaN and infinities become null.
type number float64

func (n number) MarshalJSON() ([]byte, error) {
	f := float64(n)
	if math.IsNaN(f) || math.IsInf(f, 0) {
		return []byte("null"), nil
	}
	return json.Marshal(f)
}

func (n *number) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*n = number(math.NaN())
		return nil
	}
	return json.Unmarshal(b, (*float64)(n))
}

func numbers(v []float64) []number {
	if v == nil {
		return nil
	}
	out := make([]number, len(v))
	for i, f := range v {
		out[i] = number(f)
	}
	return out
}

func floats(v []number) []float64 {
	if v == nil {
		return nil
	}
	out := make([]float64, len(v))
	for i, f := range v {
		out[i] = float64(f)
	}
	return out
}

type jsonQuantity struct {
	Value  number  `json:"value"`
	Unit   string  `json:"unit"`
	Sigma  *number `json:"sigma"`
	Method string  `json:"method,omitempty"`
}

type jsonReason struct {
	Code   string `json:"code"`
	Text   string `json:"text"`
	Value  number `json:"value"`
	Limit  number `json:"limit"`
	Unit   string `json:"unit,omitempty"`
	Remedy string `json:"remedy"`
}

type jsonVerdict struct {
	Grade   string       `json:"grade"`
	Reasons []jsonReason `json:"reasons"`
}

type jsonCurve struct {
	Name     string   `json:"name"`
	TimeUnit string   `json:"time_unit"`
	Unit     string   `json:"unit"`
	Time     []number `json:"time"`
	Value    []number `json:"value"`
	Sigma    []number `json:"sigma"`
}

type jsonTrack struct {
	TimeUnit string   `json:"time_unit"`
	Unit     string   `json:"unit"`
	Time     []number `json:"time"`
	X        []number `json:"x"`
	Y        []number `json:"y"`
	SigmaX   []number `json:"sigma_x"`
	SigmaY   []number `json:"sigma_y"`
	Light    []number `json:"light"`
}

type jsonFile struct {
	Bytes  int64  `json:"bytes"`
	SHA256 string `json:"sha256"`
}

// document is metrics.json; its order is the file's.
type document struct {
	Schema     string                  `json:"$schema"`
	Shot       string                  `json:"shot"`
	Station    string                  `json:"station"`
	Pass       string                  `json:"pass"`
	Bundle     string                  `json:"bundle"`
	Verdict    jsonVerdict             `json:"verdict"`
	Quantities map[string]jsonQuantity `json:"quantities"`
	Curves     map[string]jsonCurve    `json:"curves"`
	Track      *jsonTrack              `json:"track"`
	Notes      []string                `json:"notes"`
	Files      map[string]jsonFile     `json:"files"`
	Provenance json.RawMessage         `json:"provenance"`
}

func newDocument(r *Result, files map[string]jsonFile) *document {
	rep := r.Report
	d := &document{Schema: SchemaID, Shot: r.Shot, Station: r.Station, Pass: r.Pass, Bundle: r.Bundle,
		Verdict:    jsonVerdict{Grade: rep.Verdict.Grade, Reasons: []jsonReason{}},
		Quantities: map[string]jsonQuantity{}, Curves: map[string]jsonCurve{},
		Notes: append([]string{}, rep.Notes...), Files: files, Provenance: r.Provenance}
	if d.Provenance == nil {
		d.Provenance = json.RawMessage("null")
	}
	for _, x := range rep.Verdict.Reasons {
		d.Verdict.Reasons = append(d.Verdict.Reasons,
			jsonReason{x.Code, x.Text, number(x.Value), number(x.Limit), x.Unit, x.Remedy})
	}
	for name, q := range rep.Quantities {
		j := jsonQuantity{Value: number(q.Value), Unit: q.Unit, Method: q.Method}
		if q.Sigma != nil && !math.IsNaN(*q.Sigma) && !math.IsInf(*q.Sigma, 0) {
			s := number(*q.Sigma)
			j.Sigma = &s
		}
		d.Quantities[name] = j
	}
	for name, c := range rep.Curves {
		d.Curves[name] = jsonCurve{c.Name, c.TimeUnit, c.Unit, numbers(c.Time), numbers(c.Value), numbers(c.Sigma)}
	}
	if t := rep.Track; t != nil {
		d.Track = &jsonTrack{"ps", "px", numbers(t.Time), numbers(t.X), numbers(t.Y),
			numbers(t.SigmaX), numbers(t.SigmaY), numbers(t.Light)}
	}
	return d
}

func (d *document) write(w io.Writer) error {
	e := json.NewEncoder(w)
	e.SetEscapeHTML(false)
	e.SetIndent("", " ")
	return e.Encode(d)
}

// Summary is what metrics.json says, read back. Values that were not finite
// are NaN.
type Summary struct {
	Shot, Station, Pass, Bundle string
	Report                      measure.Report
	Provenance                  json.RawMessage
}

// Read reads the metrics of a result folder.
func Read(dir string) (*Summary, error) {
	d, err := readDocument(dir)
	if err != nil {
		return nil, err
	}
	s := &Summary{Shot: d.Shot, Station: d.Station, Pass: d.Pass, Bundle: d.Bundle, Provenance: d.Provenance}
	s.Report = measure.Report{Quantities: map[string]measure.Quantity{}, Curves: map[string]measure.Curve{},
		Notes: d.Notes, Verdict: measure.Verdict{Grade: d.Verdict.Grade}}
	for _, x := range d.Verdict.Reasons {
		s.Report.Verdict.Reasons = append(s.Report.Verdict.Reasons, measure.Reason{Code: x.Code, Text: x.Text,
			Value: float64(x.Value), Limit: float64(x.Limit), Unit: x.Unit, Remedy: x.Remedy})
	}
	for name, q := range d.Quantities {
		s.Report.Quantities[name] = measure.Quantity{Value: float64(q.Value), Unit: q.Unit,
			Sigma: (*float64)(q.Sigma), Method: q.Method}
	}
	for name, c := range d.Curves {
		s.Report.Curves[name] = measure.Curve{Name: c.Name, Time: floats(c.Time), Value: floats(c.Value),
			Sigma: floats(c.Sigma), TimeUnit: c.TimeUnit, Unit: c.Unit}
	}
	if t := d.Track; t != nil {
		s.Report.Track = &measure.Track{Time: floats(t.Time), X: floats(t.X), Y: floats(t.Y),
			SigmaX: floats(t.SigmaX), SigmaY: floats(t.SigmaY), Light: floats(t.Light)}
	}
	return s, nil
}

func readDocument(dir string) (*document, error) {
	path := filepath.Join(dir, fileMetrics)
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	b, err := io.ReadAll(io.LimitReader(f, maxMetrics+1))
	if err != nil {
		return nil, fmt.Errorf("read %s: %w", path, err)
	}
	if len(b) > maxMetrics {
		return nil, fmt.Errorf("read %s: longer than %d bytes", path, maxMetrics)
	}
	d := &document{}
	if err := json.Unmarshal(b, d); err != nil {
		return nil, fmt.Errorf("read %s: %w", path, err)
	}
	if d.Schema != SchemaID {
		return nil, fmt.Errorf("read %s: its schema is %.60q, want %q", path, d.Schema, SchemaID)
	}
	return d, nil
}
