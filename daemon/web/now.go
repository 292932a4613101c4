package web

import "net/http"

type nowBody struct {
	Attention []Attention
	More      int
	First     *Shot // the latest, shown large
	Rest      []Shot
	Stations  []Station
}

// now answers GET /.
func (s *Server) now(w http.ResponseWriter, r *http.Request) {
	snap := s.cache.get(r.Context())
	b := nowBody{Attention: attention(snap), More: snap.More, Stations: snap.Stations}
	if len(snap.Recent) > 0 {
		b.First, b.Rest = &snap.Recent[0], snap.Recent[1:]
	}
	v := s.view(snap, "now", "Now")
	v.Every, v.Body = 1, b
	s.send(w, http.StatusOK, v)
}
