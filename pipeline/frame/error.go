package frame

import (
	"errors"
	"fmt"
)

// What can be wrong with a frame file. Errors of this package wrap one of
// these, or an error of the file system.
var (
	// ErrTruncated: bytes that the file's own header promises are missing.
	// It may be complete a moment later.
	ErrTruncated = errors.New("file not complete")

	// ErrTooLarge: the file or the picture it claims exceeds Limits.
	ErrTooLarge = errors.New("frame too large")

	// ErrFormat: damaged, or a kind of picture that is not read here.
	ErrFormat = errors.New("not a readable frame")

	// ErrEmpty: no bytes, or a picture without pixels.
	ErrEmpty = errors.New("frame is empty")

	// ErrStamp: no usable time or shot number.
	ErrStamp = errors.New("no time stamp")
)

// remedy says what the laboratory can do about each kind of error.
var remedy = map[error]string{
	ErrTruncated: "wait until the camera program has finished writing; if it stays so, copy the file again or export it again as 16-bit grey TIFF",
	ErrTooLarge:  "crop or bin the frame in the camera program",
	ErrFormat:    "export it from the camera program as 16-bit grey TIFF",
	ErrEmpty:     "wait until the camera program has finished writing; if it stays so, look at the camera computer's disk",
	ErrStamp:     "set stamp to a file name pattern, \"tag\", \"sidecar\" or \"mtime\", whichever these files carry",
}

// flaw is one thing wrong with a file: its kind and the particulars.
type flaw struct {
	kind error
	text string
}

func (f *flaw) Error() string {
	return fmt.Sprintf("%v: %s; %s", f.kind, f.text, remedy[f.kind])
}

func (f *flaw) Unwrap() error { return f.kind }

func fault(kind error, format string, a ...any) error {
	return &flaw{kind, fmt.Sprintf(format, a...)}
}
