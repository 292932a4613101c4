package web

import (
	"bytes"
	"crypto/sha256"
	"embed"
	"encoding/hex"
	"fmt"
	"net/http"
	"path"
	"strings"
	"time"
)

//go:embed static
var staticFS embed.FS

// files are the style sheet, the script and the icon, under names that carry
// their hash, so that a browser may keep them for ever and never an old one.
type files struct {
	body map[string][]byte // by hashed name
	URL  map[string]string // by plain name
}

func loadStatic() (*files, error) {
	f := &files{body: map[string][]byte{}, URL: map[string]string{}}
	list, err := staticFS.ReadDir("static")
	if err != nil {
		return nil, fmt.Errorf("read embedded files: %w", err)
	}
	for _, e := range list {
		b, err := staticFS.ReadFile("static/" + e.Name())
		if err != nil {
			return nil, fmt.Errorf("read embedded file %s: %w", e.Name(), err)
		}
		sum := sha256.Sum256(b)
		ext := path.Ext(e.Name())
		name := strings.TrimSuffix(e.Name(), ext) + "." + hex.EncodeToString(sum[:6]) + ext
		f.body[name], f.URL[e.Name()] = b, "/static/"+name
	}
	return f, nil
}

func (f *files) serve(w http.ResponseWriter, r *http.Request) {
	name := r.PathValue("name")
	b, ok := f.body[name]
	if !ok {
		http.Error(w, "no such file", http.StatusNotFound)
		return
	}
	kind := map[string]string{".css": "text/css; charset=utf-8", ".js": "text/javascript; charset=utf-8",
		".svg": "image/svg+xml"}[path.Ext(name)]
	w.Header().Set("Content-Type", kind)
	w.Header().Set("Cache-Control", "public, max-age=31536000, immutable")
	http.ServeContent(w, r, name, time.Time{}, bytes.NewReader(b))
}
