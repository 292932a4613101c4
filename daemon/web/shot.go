package web

import (
	"errors"
	"net/http"
	"slices"
	"strconv"

	"go.uber.org/zap"
)

type shotBody struct {
	ShotDetail
	Pictures  []picture
	Downloads []Info
}

// picture is one picture of a result; Still is shown instead of a moving one
// to those who asked their computer for less motion.
type picture struct {
	Name, Title, Text string
	Still             string
}

var pictures = []picture{
	{Name: "movie.png", Title: "Movie", Text: "The event, frame by frame.", Still: "contact.png"},
	{Name: "movie.gif", Title: "Movie", Text: "The event, frame by frame.", Still: "contact.png"},
	{Name: "contact.png", Title: "Frames", Text: "Frames of the cube side by side, in order of time."},
	{Name: "light.svg", Title: "Light curve", Text: "Light of each frame over time."},
	{Name: "arrival.png", Title: "Arrival", Text: "When the light came, per pixel."},
	{Name: "residual.png", Title: "Residual", Text: "What the two measured frames show and the cube does not explain."},
}

// shot answers GET /shot/{id}.
func (s *Server) shot(w http.ResponseWriter, r *http.Request) {
	id, ok := shotID(r)
	if !ok {
		s.fail(w, r, http.StatusNotFound, "A shot has a whole number as its name in the address.")
		return
	}
	d, err := s.opt.Source.Shot(r.Context(), id)
	switch {
	case errors.Is(err, ErrNotFound):
		s.fail(w, r, http.StatusNotFound, "There is no shot with this number.")
		return
	case err != nil:
		s.opt.Logger.Error("read shot for the page", zap.Int64("shot", id), zap.Error(err))
		s.fail(w, r, http.StatusServiceUnavailable, "This shot cannot be read now; the log says why.")
		return
	}
	b := shotBody{ShotDetail: d}
	has := func(name string) bool {
		return slices.ContainsFunc(d.Files, func(i Info) bool { return i.Name == name })
	}
	for _, p := range pictures {
		if p.Name == "movie.gif" && has("movie.png") || !has(p.Name) {
			continue
		}
		if !has(p.Still) {
			p.Still = ""
		}
		b.Pictures = append(b.Pictures, p)
	}
	for _, f := range d.Files {
		if _, ok := kinds[f.Name]; ok {
			b.Downloads = append(b.Downloads, f)
		}
	}
	v := s.view(s.cache.get(r.Context()), "shot", d.Name)
	v.Every, v.Body = 3, b
	s.send(w, http.StatusOK, v)
}

func shotID(r *http.Request) (int64, bool) {
	id, err := strconv.ParseInt(r.PathValue("id"), 10, 64)
	return id, err == nil && id > 0
}
