package web

import (
	"bytes"
	"context"
	"fmt"
	"image"
	"image/color"
	"image/png"
	"io"
	"math"
	"net/http"
	"net/http/httptest"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus"
)

// fake is a Source made by hand; start is the time it all happens at.
type fake struct {
	mu      sync.Mutex // guards what follows
	snap    Snapshot
	list    []Shot
	detail  map[int64]ShotDetail
	checks  []Check
	dead    error
	err     error // returned by Shots, Shot and Open
	asked   int   // calls of Now
	files   map[string][]byte
	changed chan struct{}
}

var start = time.Date(2031, 3, 4, 14, 2, 11, 0, time.UTC)

func (f *fake) set(change func(f *fake)) {
	f.mu.Lock()
	change(f)
	f.mu.Unlock()
	select {
	case f.changed <- struct{}{}:
	default:
	}
}

func (f *fake) Now(context.Context) Snapshot {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.asked++
	s := f.snap
	if !s.Time.IsZero() {
		s.Time = start.Add(8 * time.Second)
	}
	return s
}

func (f *fake) Shots(_ context.Context, q Filter) (Page, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.err != nil {
		return Page{}, f.err
	}
	first := 0
	if q.After != "" {
		if n, err := fmt.Sscanf(q.After, "p%d", &first); n != 1 || err != nil {
			return Page{}, ErrCursor
		}
	}
	var p Page
	for i := first; i < len(f.list); i++ {
		s := f.list[i]
		if q.Station != "" && s.Station != q.Station || q.State != "" && s.State != q.State ||
			q.Verdict != "" && s.Verdict != q.Verdict || !strings.Contains(s.Name+s.Reason, q.Text) {
			continue
		}
		if len(p.Shots) == q.Limit {
			p.Next = fmt.Sprintf("p%d", i)
			break
		}
		p.Shots = append(p.Shots, s)
	}
	return p, nil
}

func (f *fake) Shot(_ context.Context, id int64) (ShotDetail, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	d, ok := f.detail[id]
	if !ok {
		return ShotDetail{}, ErrNotFound
	}
	return d, f.err
}

type reader struct{ *bytes.Reader }

func (reader) Close() error { return nil }

func (f *fake) Open(_ context.Context, id int64, name string) (io.ReadSeekCloser, Info, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	b, ok := f.files[name]
	if !ok || id >= 1000 {
		return nil, Info{}, ErrNotFound
	}
	if name == "contact.png" {
		b = contact(int(id))
	}
	return reader{bytes.NewReader(b)}, Info{Name: name, Size: int64(len(b)), ModTime: start}, f.err
}

func (f *fake) Changed() <-chan struct{} { return f.changed }

func (f *fake) Ready(context.Context) []Check {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.checks
}

func (f *fake) Alive(context.Context) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.dead
}

// newFake is a station on an ordinary afternoon, with a few troubles.
func newFake() *fake {
	f := &fake{changed: make(chan struct{}, 1), detail: map[int64]ShotDetail{},
		checks: []Check{{Name: "queue open", OK: true}, {Name: "bay-a streak folder", OK: true}},
		files: map[string][]byte{"contact.png": nil, "cube.nxs": []byte("\x89HDF\r\n\x1a\nrest"), "metrics.json": []byte("{}\n"),
			"light.svg": []byte(lightSVG)}}
	grade := []string{"good", "good", "doubtful", "good", "unusable", "good", "good"}
	why := map[string]string{"doubtful": "arms disagree by 14 %", "unusable": "streak frame saturated in 31 % of the lit pixels"}
	for i := range 7 {
		s := Shot{ID: int64(70 - i), Name: "S_" + start.Add(-time.Duration(i)*95*time.Second).Format("20060102T150405") + ".250", Station: "bay-a", Time: start.Add(-time.Duration(i) * 95 * time.Second),
			State: "done", Pass: "full", Verdict: grade[i], Reason: why[grade[i]], Picture: true, Published: start,
			Key: []Quantity{{Name: "Duration (FWHM)", Value: 12.3456 + float64(i), Sigma: 0.21, Unit: "ps"},
				{Name: "Front speed", Value: 0.22474, Sigma: 0.0031, Unit: "mm/ps"},
				{Name: "Light", Value: 4.1234e6, Sigma: 2.3e4, Unit: "photoelectrons"}}}
		f.list = append(f.list, s)
	}
	f.list[0].Pass = "quick look"
	f.list = append(f.list, Shot{ID: 63, Name: "S_20310304T135011.118", Station: "bay-b", Time: start.Add(-12 * time.Minute), State: "quarantined"},
		Shot{ID: 62, Name: "S_20310304T134811.731", Station: "bay-b", Time: start.Add(-14 * time.Minute), State: "lone"})
	d := ShotDetail{Shot: f.list[2], Bundle: "bay-a-20310304", Folder: `D:\drop\streak\S_20310304T135901.250.shot`, Gap: 1820 * time.Microsecond,
		Reasons: []Reason{{"arms", "The arms disagree by 14 %.", "Check the beam splitter ratio or recalibrate."},
			{"saturated", "The streak frame is saturated in 3.1 % of the lit pixels.", "Reduce the light."}},
		Quantities: append(f.list[2].Key, Quantity{Name: "Arrival at the edge", Value: math.NaN(), Unit: "ps", Method: "no pixel is bright enough"},
			Quantity{Name: "Rise (10–90 %)", Value: 3.1, Sigma: math.NaN(), Unit: "ps", Method: "light curve"}),
		Attempts: []Attempt{{1, "quick look", "", start, 1300 * time.Millisecond, "read streak frame: the file ends after 1203 of 4196352 bytes"},
			{2, "quick look", "", start.Add(8 * time.Second), 1210 * time.Millisecond, ""}, {3, "full", "lab-pc", start.Add(10 * time.Second), 41 * time.Second, ""}},
		Frames: []Frame{{"streak", `D:\drop\streak\S_20310304T135901.250.tif`, start, 4196352}, {"reference", `D:\drop\reference\R_20310304T135901.252.tif`, start.Add(2 * time.Millisecond), 2097664}},
		Files:  []Info{{"contact.png", 81234, start}, {"light.svg", 6120, start}, {"metrics.json", 5120, start}, {"cube.nxs", 48123456, start}}}
	f.detail[68] = d
	f.snap = Snapshot{Campaign: "harbour-07", Time: start,
		Queue:  Queue{Waiting: 3, Running: 1, Oldest: 4 * time.Second, Slots: 2, PerShot: 40 * time.Second, Last: start},
		Recent: f.list[:7],
		Stations: []Station{{Name: "bay-a", Bundle: "bay-a-20310304", Folders: []Folder{{Arm: "streak", Path: `D:\drop\streak`, Condition: "ok", Last: start},
			{Arm: "reference", Path: `D:\drop\reference`, Condition: "ok", Last: start}}},
			{Name: "bay-b", Bundle: "bay-b-20310228", Folders: []Folder{{Arm: "streak", Path: `\\camera2\drop\streak`, Condition: "missing", Since: start.Add(-9 * time.Minute),
				Detail: "Plug the share in again or check the cable to camera2.", Last: start.Add(-10 * time.Minute)},
				{Arm: "reference", Path: `D:\drop\bay-b`, Condition: "ok", Last: start.Add(-11 * time.Minute)}}}},
		Attention: []Attention{{Shot: 63, Name: "S_20310304T135011.118", Station: "bay-b", State: "quarantined", Since: start.Add(-11 * time.Minute),
			Text: "Given up after 4 attempts: the reference frame is 640×480, the bundle was made for 1280×960.", Remedy: "Set the camera back to full frame, or calibrate for the new size."},
			{Shot: 61, Name: "S_20310304T134410.002", Station: "bay-a", State: "held", Since: start.Add(-20 * time.Minute), Text: "Two reference frames are within 5 ms.", Remedy: "Choose one: unsheard pair 61 R_20310304T134410.004.tif"}}}
	return f
}

const lightSVG = `<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 400 160"><path d="M20 140H380M20 20V140" fill="none" stroke="#444"/><path d="M20 138C120 138 150 30 190 30S250 138 380 138" fill="none" stroke="#0b5c8a" stroke-width="2"/></svg>`

// contact draws sixteen frames of a spot that moves, so that the screenshots
// look like the real thing.
func contact(seed int) []byte {
	const n, tile = 4, 96
	m := image.NewRGBA(image.Rect(0, 0, n*tile, n*tile*3/4))
	for y := range n * tile * 3 / 4 {
		for x := range n * tile {
			k := float64(y/(tile*3/4)*n + x/tile)
			dx := float64(x%tile) - 12 - 4.6*k
			dy := float64(y%(tile*3/4)) - 36 - 8*math.Sin(k/3+float64(seed))
			v := math.Exp(-(dx*dx/90 + dy*dy/160)) * math.Exp(-(k-7)*(k-7)/40)
			m.Set(x, y, color.RGBA{uint8(255 * min(1, 1.6*v)), uint8(255 * v * v), uint8(90*math.Sqrt(v) + 8), 255})
			if x%tile == 0 || y%(tile*3/4) == 0 {
				m.Set(x, y, color.RGBA{38, 46, 50, 255})
			}
		}
	}
	var b bytes.Buffer
	if err := png.Encode(&b, m); err != nil {
		panic(err)
	}
	return b.Bytes()
}

// serve makes a server on a fake.
func serve(t *testing.T, f *fake, change func(*Options)) *Server {
	t.Helper()
	o := Options{Listen: "127.0.0.1:0", Source: f, Registry: prometheus.NewRegistry(), Version: "0.1-test", Zone: time.UTC,
		Clock: func() time.Time { return start.Add(9 * time.Second) }}
	if change != nil {
		change(&o)
	}
	s, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// get asks a handler as a browser on this computer would.
func get(t *testing.T, h http.Handler, path string) *httptest.ResponseRecorder {
	t.Helper()
	r := httptest.NewRequest(http.MethodGet, path, nil)
	r.Host = "127.0.0.1:8787"
	w := httptest.NewRecorder()
	h.ServeHTTP(w, r)
	return w
}
