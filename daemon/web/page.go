package web

import (
	"bytes"
	"embed"
	"fmt"
	"html/template"
	"net/http"
	"slices"
	"strconv"
	"time"

	"go.uber.org/zap"
)

//go:embed page
var pageFS embed.FS

// pages holds one template set per page, each with the layout.
type pages map[string]*template.Template

// words explains each state beside its name.
var words = map[string]string{
	"waiting":     "one arm seen",
	"held":        "ambiguous, needs a person",
	"paired":      "both arms, in the queue",
	"running":     "being worked on",
	"done":        "result published",
	"failed":      "will be tried again",
	"quarantined": "given up, needs a person",
	"lone":        "its partner never came",
}

func loadPages(zone *time.Location, now func() time.Time) (pages, error) {
	in := func(f func(time.Time) string) func(time.Time) string {
		return func(t time.Time) string {
			if t.IsZero() {
				return "—"
			}
			return f(t.In(zone))
		}
	}
	funcs := template.FuncMap{
		"clock": in(func(t time.Time) string { return near(t, now().In(zone)) }), "stamp": in(stamp), "iso": in(func(t time.Time) string { return t.Format(time.RFC3339Nano) }),
		"zone": in(func(t time.Time) string { return t.Format("MST -07:00") }),
		"took": took, "size": size, "number": number, "picture": pictureURL, "fileurl": fileURL, "words": func(s string) string { return words[s] },
	}
	out := pages{}
	for _, name := range []string{"now", "shots", "shot", "fault"} {
		t, err := template.New("layout.html").Funcs(funcs).
			ParseFS(pageFS, "page/layout.html", "page/part.html", "page/"+name+".html")
		if err != nil {
			return nil, fmt.Errorf("parse page %s: %w", name, err)
		}
		out[name] = t.Option("missingkey=error")
	}
	return out, nil
}

// view is what the layout needs; Body is what the page needs.
type view struct {
	Page     string // now, shots, shot, fault
	Title    string
	Every    int // seconds between two fetches of the page at most; 0: it stays as it is
	Static   map[string]string
	Version  string
	Campaign string
	Health   health
	Needs    int // how many things need a person
	Taken    time.Time
	Fault    string
	Body     any
}

// view starts a page with what all of them show.
func (s *Server) view(snap Snapshot, page, title string) view {
	v := view{Page: page, Title: title, Static: s.files.URL, Version: s.opt.Version, Campaign: snap.Campaign,
		Taken: snap.Time, Fault: snap.Fault, Needs: len(attention(snap)) + snap.More,
		Health: healthOf(snap.Queue, s.opt.Behind, s.opt.Clock().In(s.opt.Zone))}
	old := s.opt.Clock().Sub(snap.Time)
	switch {
	case snap.Time.IsZero():
		v.Health = health{levelBad, "no answer", "the service does not say how it is"}
	case old > oldNotice:
		v.Health.Level = levelBad
		v.Fault = fmt.Sprintf("The service has not answered for %s: what you see is old. %s", age(old), v.Fault)
	}
	return v
}

// send renders into memory first, so that a fault gives a clean answer.
func (s *Server) send(w http.ResponseWriter, code int, v view) {
	var b bytes.Buffer
	if err := s.pages[v.Page].Execute(&b, v); err != nil {
		s.opt.Logger.Error("render page", zap.String("page", v.Page), zap.Error(err))
		http.Error(w, "This page could not be put together; the log says why.", http.StatusInternalServerError)
		return
	}
	w.Header().Set("Content-Type", "text/html; charset=utf-8")
	w.Header().Set("Content-Length", strconv.Itoa(b.Len()))
	w.WriteHeader(code)
	_, _ = w.Write(b.Bytes())
}

// fail answers with a page that says what is wrong.
func (s *Server) fail(w http.ResponseWriter, r *http.Request, code int, text string) {
	v := s.view(s.cache.get(r.Context()), "fault", http.StatusText(code))
	v.Body = text
	s.send(w, code, v)
}

// attention is the Source's list with the folders that do not work put first:
// without them no shot comes in.
func attention(snap Snapshot) []Attention {
	var out []Attention
	for _, st := range snap.Stations {
		for _, f := range st.Folders {
			if f.Condition != "ok" {
				out = append(out, Attention{Name: f.Arm + " folder", Station: st.Name, State: f.Condition,
					Since: f.Since, Text: f.Path, Remedy: f.Detail})
			}
		}
		if st.Warning != "" {
			out = append(out, Attention{Name: "bundle", Station: st.Name, State: "warning", Text: st.Warning})
		}
	}
	return append(out, snap.Attention...)
}

func oneOf(value string, list []string) bool { return value == "" || slices.Contains(list, value) }
