package daemon

import (
	"encoding/json"
	"fmt"
	"math"

	"unsheard/pipeline"
	"unsheard/pipeline/measure"
)

// summary is what the ledger keeps of a result for the lists: few numbers,
// and the reasons of the verdict. Everything else is in the result folder.
type summary struct {
	Quantities []keyed          `json:"quantities"`
	Reasons    []measure.Reason `json:"reasons"`
	Seconds    float64          `json:"seconds"`
	Bundle     string           `json:"bundle"`
}

// keyed is a quantity with its name.
type keyed struct {
	Name string `json:"name"`
	measure.Quantity
}

// listed names the quantities of the lists, in their order.
var listed = []string{"peak_time", "fwhm", "speed"}

func summarise(res *pipeline.Result) (json.RawMessage, error) {
	s := summary{Reasons: res.Report.Verdict.Reasons, Seconds: res.Seconds(), Bundle: res.Provenance.BundleID}
	for _, name := range listed {
		if q, ok := res.Report.Quantities[name]; ok && !math.IsNaN(q.Value) {
			q.Method = ""
			s.Quantities = append(s.Quantities, keyed{name, q})
		}
	}
	b, err := json.Marshal(s)
	if err != nil {
		return nil, fmt.Errorf("summarise shot %s: %w", res.Provenance.Shot, err)
	}
	return b, nil
}

// read parses a summary of the ledger. A missing or damaged one is empty: the
// result folder has everything.
func readSummary(b json.RawMessage) (s summary) {
	if len(b) > 0 && json.Unmarshal(b, &s) != nil {
		return summary{}
	}
	return s
}
