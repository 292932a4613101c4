package config

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"

	"github.com/pelletier/go-toml/v2"
)

// MaxSize is the largest configuration file read, bytes. A real one has a
// few kilobytes; anything larger is not a configuration.
const MaxSize = 1 << 20

// Load reads, completes and checks the file at path.
func Load(path string) (*Config, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, fmt.Errorf("read configuration: %w", err)
	}
	if info.IsDir() {
		return nil, fmt.Errorf("read configuration %q: it is a folder: name the file inside it", path)
	}
	if info.Size() > MaxSize {
		return nil, fmt.Errorf("read configuration %q: %d bytes, more than %d: this is not a configuration file", path, info.Size(), MaxSize)
	}
	data, err := os.ReadFile(path)
	if err != nil {
		return nil, fmt.Errorf("read configuration: %w", err)
	}
	return Parse(data, path)
}

// Parse is Load for a file already in memory. The path is used in messages
// and its folder for relative paths; nothing is read.
func Parse(data []byte, path string) (*Config, error) {
	base, err := filepath.Abs(filepath.Dir(path))
	if err != nil {
		return nil, fmt.Errorf("find the folder of configuration %q: %w", path, err)
	}
	data = bytes.TrimPrefix(data, []byte("\xef\xbb\xbf"))
	doc := &document{file: path, data: data, keys: map[string]int{}}
	if err := syntax(doc); err != nil {
		return nil, err
	}
	if err := walk(doc).err(); err != nil {
		return nil, err
	}
	c := basis()
	if err := toml.NewDecoder(bytes.NewReader(data)).DisallowUnknownFields().Decode(c); err != nil {
		return nil, translate(doc, err)
	}
	c.fill(doc)
	c.resolve(base)
	l := &list{doc: doc}
	c.check(l)
	if err := l.err(); err != nil {
		return nil, err
	}
	c.settle()
	return c, nil
}

// syntax says whether the document is TOML.
func syntax(doc *document) error {
	if bytes.HasPrefix(doc.data, []byte("\xff\xfe")) || bytes.HasPrefix(doc.data, []byte("\xfe\xff")) {
		l := &list{doc: doc}
		l.at(0, "", "the file is in UTF-16", "save it as UTF-8")
		return l.err()
	}
	var any map[string]any
	if err := toml.Unmarshal(doc.data, &any); err != nil {
		return translate(doc, err)
	}
	return nil
}

// translate puts the decoder's error into our form.
func translate(doc *document, err error) error {
	l := &list{doc: doc}
	var strict *toml.StrictMissingError
	var de *toml.DecodeError
	switch {
	case errors.As(err, &strict):
		for i := range strict.Errors {
			e := &strict.Errors[i]
			l.at(offset(doc.data, e), "", fmt.Sprintf("unknown key %q", strings.Join(e.Key(), ".")), "leave it out")
		}
	case errors.As(err, &de):
		what := strings.TrimPrefix(de.Error(), "toml: ")
		at := offset(doc.data, de)
		if strings.HasSuffix(what, "at start of value") && strings.Contains(what, "U+000") {
			what = "no value after ="
		}
		l.at(at, "", what, remedy(what, line(doc.data, at)))
	default:
		l.at(0, "", strings.TrimPrefix(err.Error(), "toml: "), "compare with the example configuration")
	}
	return l.err()
}

// offset turns the decoder's line and byte column back into an offset.
func offset(data []byte, e *toml.DecodeError) int {
	row, col := e.Position()
	start := 0
	for ; row > 1; row-- {
		i := bytes.IndexByte(data[start:], '\n')
		if i < 0 {
			break
		}
		start += i + 1
	}
	return min(start+col-1, len(data))
}

// line is the text of the line around an offset.
func line(data []byte, offset int) string {
	start := bytes.LastIndexByte(data[:offset], '\n') + 1
	end := bytes.IndexByte(data[start:], '\n')
	if end < 0 {
		return string(data[start:])
	}
	return string(data[start : start+end])
}

// single is the advice for a path that was taken for escapes.
const single = `in double quotes a backslash begins an escape: write Windows paths in single quotes, like 'D:\drop\streak'`

// remedy says what to write instead, from what the decoder said and the
// line it said it about.
func remedy(what, line string) string {
	switch {
	case strings.Contains(what, "already"):
		return "keep one of the two"
	case strings.Contains(line, `"`) && strings.Contains(line, `\`):
		return single
	case strings.Contains(line, `\`):
		return `write paths in single quotes, like 'D:\drop\streak'`
	case strings.Contains(what, "string"), strings.Contains(what, "keyword"), strings.Contains(what, "value"):
		return `write text in quotes, like name = "bay-a"`
	case strings.Contains(what, "table name"):
		return "close the brackets, like [work] or [[station]]"
	case strings.Contains(what, "key"):
		return `write one key = value in each line, like slots = 2`
	case strings.Contains(what, "array"):
		return `close the list, like formats = ["nexus"]`
	}
	return "write one key = value in each line; see the example configuration"
}
