package measure

import "math"

// Quantity is a number with its unit and one standard deviation.
type Quantity struct {
	Value  float64  `json:"value"`
	Unit   string   `json:"unit"`
	Sigma  *float64 `json:"sigma"` // nil: not known
	Method string   `json:"method,omitempty"`
}

// Curve is a quantity over time.
type Curve struct {
	Name     string    `json:"name"`
	Time     []float64 `json:"time"`
	Value    []float64 `json:"value"`
	Sigma    []float64 `json:"sigma"`
	TimeUnit string    `json:"time_unit"`
	Unit     string    `json:"unit"`
}

// Track is the path of the light's centroid, in window pixels over ps.
type Track struct {
	Time   []float64 `json:"time"`
	X      []float64 `json:"x"`
	Y      []float64 `json:"y"`
	SigmaX []float64 `json:"sigma_x"`
	SigmaY []float64 `json:"sigma_y"`
	Light  []float64 `json:"light"`
}

// Report is everything measured about a shot.
type Report struct {
	Quantities map[string]Quantity `json:"quantities"`
	Curves     map[string]Curve    `json:"curves"`
	Track      *Track              `json:"track,omitempty"`
	Verdict    Verdict             `json:"verdict"`
	Notes      []string            `json:"notes,omitempty"`
}

func (r *Report) set(name string, value, sigma float64, unit, method string) {
	if math.IsNaN(value) || math.IsInf(value, 0) {
		return
	}
	q := Quantity{Value: value, Unit: unit, Method: method}
	if sigma >= 0 && !math.IsInf(sigma, 0) {
		q.Sigma = &sigma
	}
	r.Quantities[name] = q
}

// unknown is the deviation of a quantity whose deviation is not known.
var unknown = math.NaN()

func (r *Report) note(s string) { r.Notes = append(r.Notes, s) }
