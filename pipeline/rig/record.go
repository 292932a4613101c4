package rig

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"time"
)

// Record is what is known about one shot of a campaign. The same station
// options, scene name and seed make the scene again.
type Record struct {
	Shot      int64     `json:"shot"`
	Time      time.Time `json:"time"` // true time of the shot, streak clock
	Scene     string    `json:"scene"`
	Seed      uint64    `json:"seed,string"` // beyond what JSON numbers hold exactly
	Fault     Fault     `json:"fault,omitempty"`
	Streak    string    `json:"streak,omitempty"`    // file names
	Reference string    `json:"reference,omitempty"` // as delivered
	Again     string    `json:"again,omitempty"`     // the streak frame's second name
	Edges     []float64 `json:"edges_ps"`            // frames of the true cube
	Facts     []Fact    `json:"facts"`
	Summary   Summary   `json:"summary"`
}

// Known is what calibration should find out about a station; all positions in
// the turned frame.
type Known struct {
	Options      Options    `json:"options"`
	Registration [9]float64 `json:"registration"`
	Edges        []float64  `json:"edges_ps"`
	Delays       []float64  `json:"delays_ps"`
	Displacement []float64  `json:"displacement_px"` // at the delays
}

// Known returns what calibration should find out.
func (s *Station) Known() Known {
	k := Known{Options: s.o, Registration: s.homography, Edges: s.Edges(), Delays: s.Delays()}
	for _, d := range k.Delays {
		k.Displacement = append(k.Displacement, s.At(d))
	}
	return k
}

// writeKnown writes station.json and code.npy.
func (s *Station) writeKnown(dir string) error {
	if err := writeJSON(filepath.Join(dir, "station.json"), s.Known()); err != nil {
		return err
	}
	return os.WriteFile(filepath.Join(dir, "code.npy"), npy(s.Code(), s.o.H, s.o.W), 0o644)
}

// writeRecord writes shot_000001.json and, if asked for, shot_000001.npy.
func (s *Station) writeRecord(dir string, r Record, truth Truth, cube bool) error {
	stem := filepath.Join(dir, fmt.Sprintf("shot_%06d", r.Shot))
	if cube {
		b := npy(truth.Cube(r.Edges), s.o.T, s.o.H, s.o.W)
		if err := os.WriteFile(stem+".npy", b, 0o644); err != nil {
			return err
		}
	}
	return writeJSON(stem+".json", r)
}

func writeJSON(path string, v any) error {
	b, err := json.MarshalIndent(v, "", "  ")
	if err != nil {
		return err
	}
	return os.WriteFile(path, append(b, '\n'), 0o644)
}

// npy encodes an array of float32 in NumPy's file format, version 1.0
// (numpy.lib.format): the header is padded to a multiple of 64 bytes.
func npy(data []float32, shape ...int) []byte {
	side := make([]string, len(shape))
	for i, n := range shape {
		side[i] = fmt.Sprint(n)
	}
	head := fmt.Sprintf("{'descr': '<f4', 'fortran_order': False, 'shape': (%s,), }", strings.Join(side, ", "))
	head += strings.Repeat(" ", 63-(10+len(head))%64) + "\n"
	var b bytes.Buffer
	b.WriteString("\x93NUMPY\x01\x00")
	out := binary.LittleEndian.AppendUint16(b.Bytes(), uint16(len(head)))
	out = append(out, head...)
	for _, v := range data {
		out = binary.LittleEndian.AppendUint32(out, math.Float32bits(v))
	}
	return out
}
