package web

import (
	"errors"
	"fmt"
	"net/http"
	"net/url"
	"strings"
	"unicode/utf8"

	"go.uber.org/zap"
)

const longest = 200 // bytes of one value in the address

type shotsBody struct {
	Filter   Filter
	Page     Page
	Stations []string
	States   []string
	Verdicts []string
	Next     string // address of the next page; empty: none
	Newest   string // address of the first page; empty: this is it
	Filtered bool
}

// shots answers GET /shots. Paging is by keyset: the address carries the
// place to go on from, so a page stays right while shots come in.
func (s *Server) shots(w http.ResponseWriter, r *http.Request) {
	f, fault := readFilter(r.URL.Query())
	if fault != "" {
		s.fail(w, r, http.StatusBadRequest, fault)
		return
	}
	f.Limit = s.opt.Limit
	p, err := s.opt.Source.Shots(r.Context(), f)
	switch {
	case errors.Is(err, ErrCursor):
		s.fail(w, r, http.StatusBadRequest, "This address goes on from a place in the list that does not exist; start from the newest shot.")
		return
	case err != nil:
		s.opt.Logger.Error("list shots for the page", zap.Error(err))
		s.fail(w, r, http.StatusServiceUnavailable, "The list of shots cannot be read now; the log says why.")
		return
	}
	snap := s.cache.get(r.Context())
	b := shotsBody{Filter: f, Page: p, States: States, Verdicts: Verdicts,
		Filtered: f.Station+f.State+f.Verdict+f.Text != ""}
	for _, st := range snap.Stations {
		b.Stations = append(b.Stations, st.Name)
	}
	if !oneOf(f.Station, b.Stations) { // a station of an earlier day
		b.Stations = append(b.Stations, f.Station)
	}
	if p.Next != "" {
		b.Next = shotsURL(f, p.Next)
	}
	v := s.view(snap, "shots", "Shots")
	if f.After == "" {
		v.Every = 5
	} else {
		b.Newest = shotsURL(f, "")
	}
	v.Body = b
	s.send(w, http.StatusOK, v)
}

// readFilter returns the filter in the address, and what is wrong with it.
func readFilter(q url.Values) (f Filter, fault string) {
	f = Filter{Station: q.Get("station"), State: q.Get("state"), Verdict: q.Get("verdict"),
		Text: strings.TrimSpace(q.Get("text")), After: q.Get("after")}
	for _, v := range []struct{ name, value string }{{"station", f.Station}, {"text", f.Text}, {"after", f.After}} {
		if len(v.value) > longest || !utf8.ValidString(v.value) || strings.ContainsRune(v.value, 0) {
			return f, fmt.Sprintf("The value of %q in the address is no text of at most %d bytes.", v.name, longest)
		}
	}
	if !oneOf(f.State, States) {
		return f, fmt.Sprintf("There is no state %q; the states are %s.", f.State, strings.Join(States, ", "))
	}
	if !oneOf(f.Verdict, Verdicts) {
		return f, fmt.Sprintf("There is no verdict %q; the verdicts are %s.", f.Verdict, strings.Join(Verdicts, ", "))
	}
	return f, ""
}

// shotsURL is the address of the table with a filter, without empty parts.
func shotsURL(f Filter, after string) string {
	q := url.Values{}
	for _, v := range [][2]string{{"station", f.Station}, {"state", f.State}, {"verdict", f.Verdict},
		{"text", f.Text}, {"after", after}} {
		if v[1] != "" {
			q.Set(v[0], v[1])
		}
	}
	if len(q) == 0 {
		return "/shots"
	}
	return "/shots?" + q.Encode()
}
