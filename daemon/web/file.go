package web

import (
	"errors"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"

	"go.uber.org/zap"
)

// kind says how a result file is sent.
type kind struct {
	mime   string
	inline bool // shown by the browser; otherwise saved
}

// kinds is the whole list of files that are ever served.
var kinds = map[string]kind{
	"contact.png":  {"image/png", true},
	"movie.png":    {"image/png", true},
	"movie.gif":    {"image/gif", true},
	"arrival.png":  {"image/png", true},
	"residual.png": {"image/png", true},
	"light.svg":    {"image/svg+xml", true},
	"metrics.json": {"application/json", false},
	"log.jsonl":    {"application/jsonl", false}, // not registered with IANA
	"cube.nxs":     {"application/x-hdf5", false},
}

// filePolicy keeps a result file that is opened by itself from doing
// anything. An SVG needs its own style attributes.
const filePolicy = "default-src 'none'; style-src 'unsafe-inline'; sandbox; frame-ancestors 'none'"

// slowest is the slowest download that is not cut, bytes per second.
const slowest = 64 << 10

// file answers GET /shot/{id}/file/{name}, with ranges.
func (s *Server) file(w http.ResponseWriter, r *http.Request) {
	id, ok := shotID(r)
	name := r.PathValue("name")
	k, listed := kinds[name]
	if !ok || !listed {
		s.fail(w, r, http.StatusNotFound, "There is no such result file.")
		return
	}
	select {
	case s.loads <- struct{}{}:
		defer func() { <-s.loads }()
	default:
		s.metrics.refused.WithLabelValues("downloads").Inc()
		w.Header().Set("Retry-After", "5")
		s.fail(w, r, http.StatusServiceUnavailable, "Too many files are being sent at once; try again in a moment.")
		return
	}
	f, info, err := s.opt.Source.Open(r.Context(), id, name)
	switch {
	case errors.Is(err, ErrNotFound):
		s.fail(w, r, http.StatusNotFound, "This shot has no such result file.")
		return
	case err != nil:
		s.opt.Logger.Warn("open result file for the page", zap.Int64("shot", id), zap.String("name", name), zap.Error(err))
		s.fail(w, r, http.StatusServiceUnavailable, "This file cannot be read now; the log says why.")
		return
	}
	defer f.Close()
	until := time.Now().Add(time.Minute + time.Duration(info.Size/slowest)*time.Second)
	_ = http.NewResponseController(w).SetWriteDeadline(until)
	h := w.Header()
	h.Set("Content-Type", k.mime)
	h.Set("Content-Security-Policy", filePolicy)
	h.Set("Cache-Control", "private, no-cache")
	h.Set("ETag", `"`+strconv.FormatInt(info.ModTime.UnixNano(), 36)+"-"+strconv.FormatInt(info.Size, 36)+`"`)
	if !k.inline {
		h.Set("Content-Disposition", `attachment; filename="`+strings.Replace(name, ".", "-"+strconv.FormatInt(id, 10)+".", 1)+`"`)
	}
	http.ServeContent(w, r, name, info.ModTime, f)
}

func fileURL(id int64, name string) string {
	return "/shot/" + strconv.FormatInt(id, 10) + "/file/" + url.PathEscape(name)
}

// pictureURL is a picture's address; it changes with the result, so that an
// open page shows the new one.
func pictureURL(s Shot, name string) string {
	u := fileURL(s.ID, name)
	if !s.Published.IsZero() {
		u += "?v=" + strconv.FormatInt(s.Published.UnixMilli(), 36)
	}
	return u
}
