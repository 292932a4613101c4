package frame

import (
	"strings"
	"time"
)

// Tags of Exif 2.32 that tell the time. They stand in a directory of their
// own, to which tagExif points, or among the others.
const (
	tagExif           = 34665
	tagOriginal       = 36867
	tagOffset         = 36880
	tagOffsetOriginal = 36881
	tagSubSec         = 37520
	tagSubSecOriginal = 37521
)

// tiffClock lists the times a TIFF file may tell, best first: the exposure,
// then the last change of the file.
var tiffClock = []struct {
	name                string
	text, subSec, shift uint16
}{
	{"EXIF DateTimeOriginal", tagOriginal, tagSubSecOriginal, tagOffsetOriginal},
	{"TIFF DateTime", tagDateTime, tagSubSec, tagOffset},
}

// taken reads the time from the tags.
func (d *directory) taken(loc *time.Location) (time.Time, string, error) {
	exif := &directory{src: d.src, order: d.order, big: d.big}
	if at, err := d.uint(tagExif, 0); err != nil {
		return time.Time{}, "", err
	} else if at != 0 {
		if err := exif.load(offset(at)); err != nil {
			return time.Time{}, "", err
		}
	}
	for _, c := range tiffClock {
		var text [3]string
		for i, tag := range []uint16{c.text, c.subSec, c.shift} {
			s, err := exif.text(tag)
			if s == "" && err == nil {
				s, err = d.text(tag)
			}
			if err != nil {
				return time.Time{}, "", err
			}
			text[i] = s
		}
		if strings.Trim(text[0], " :0") == "" { // Exif writes an unknown time as blanks
			continue
		}
		t, err := exifTime(text[0], text[1], text[2], loc)
		if err != nil {
			return time.Time{}, "", fault(ErrStamp, "%s: %v", c.name, err)
		}
		return t, c.name, nil
	}
	return time.Time{}, "", fault(ErrStamp, "the TIFF file has neither DateTimeOriginal nor DateTime")
}

// exifTime joins a time, its fraction (digits) and its zone (+hh:mm), the last
// two perhaps empty.
func exifTime(text, frac, zone string, loc *time.Location) (time.Time, error) {
	t, err := clock(text+zone, loc)
	if err != nil || frac == "" || t.Nanosecond() != 0 {
		return t, err
	}
	ns, ok := fraction(frac)
	if !ok {
		return t, &time.ParseError{Value: frac, Message: ": the fraction of the second is no digits"}
	}
	return t.Add(time.Duration(ns)), nil
}

// fraction reads the digits behind a decimal point in nanoseconds; digits
// beyond the ninth are dropped.
func fraction(s string) (ns int, ok bool) {
	for i := range max(9, len(s)) {
		c := byte('0')
		if i < len(s) {
			c = s[i]
		}
		if c < '0' || c > '9' {
			return 0, false
		}
		if i < 9 {
			ns = 10*ns + int(c-'0')
		}
	}
	return ns, true
}

// layouts are the ways in which cameras write a time. Go accepts a fraction
// behind the seconds of each.
var layouts = []string{
	"2006:01:02 15:04:05", "2006:01:02 15:04:05Z07:00",
	"2006-01-02T15:04:05", time.RFC3339,
	"2006-01-02 15:04:05", "2006-01-02 15:04:05Z07:00", "2006/01/02 15:04:05",
	"Mon, 2 Jan 2006 15:04:05 -0700", "2 Jan 2006 15:04:05 -0700",
}

// utcLayouts name the zone in words; only that of UTC is sure.
var utcLayouts = []string{"Mon, 2 Jan 2006 15:04:05 GMT", "Mon, 2 Jan 2006 15:04:05 UTC",
	"2 Jan 2006 15:04:05 GMT", "2 Jan 2006 15:04:05 UTC"}

// clock reads a time; one without a zone is in loc.
func clock(text string, loc *time.Location) (time.Time, error) {
	for _, l := range layouts {
		if t, err := time.ParseInLocation(l, text, loc); err == nil {
			return t, nil
		}
	}
	for _, l := range utcLayouts {
		if t, err := time.ParseInLocation(l, text, time.UTC); err == nil {
			return t, nil
		}
	}
	return time.Time{}, &time.ParseError{Value: text, Message: ": cannot be read as a time"}
}

// date makes a time of fields that must all be in range.
func date(y, m, d, hour, minute, sec, ns int, loc *time.Location) (time.Time, bool) {
	day := time.Date(y, time.Month(m), d, 0, 0, 0, 0, time.UTC)
	ok := y > 0 && day.Year() == y && int(day.Month()) == m && day.Day() == d &&
		hour >= 0 && hour < 24 && minute >= 0 && minute < 60 && sec >= 0 && sec < 60
	return time.Date(y, time.Month(m), d, hour, minute, sec, ns, loc), ok
}

// fitsTaken reads DATE-OBS of the image's own header, or of the primary one.
// It is in UTC (FITS 4.0, section 9.2.1: the default of TIMESYS).
func fitsTaken(own, primary *unit) (time.Time, string, error) {
	key := func(name string) string {
		if s := own.keys[name]; s != "" {
			return s
		}
		return primary.keys[name]
	}
	none := time.Time{}
	text := key("DATE-OBS")
	if text == "" {
		return none, "", fault(ErrStamp, "the FITS file has no DATE-OBS")
	}
	if sys := key("TIMESYS"); sys != "" && !strings.EqualFold(sys, "UTC") {
		return none, "", fault(ErrStamp, "the FITS file counts time in %s (TIMESYS), want UTC", sys)
	}
	if !strings.Contains(text, "T") {
		// Common practice, in the FITS dictionary of commonly used keywords.
		of := key("TIME-OBS")
		if of == "" {
			return none, "", fault(ErrStamp, "FITS DATE-OBS reads %q, without a time of day", text)
		}
		text += "T" + of
	}
	t, err := clock(text, time.UTC)
	if err != nil {
		return none, "", fault(ErrStamp, "FITS DATE-OBS: %v", err)
	}
	return t, "FITS DATE-OBS", nil
}

// tagTime reads the time stored in the file, whatever its pixels are like.
func tagTime(s source, loc *time.Location) (time.Time, error) {
	kind, err := sniff(s)
	if err != nil {
		return time.Time{}, err
	}
	var t time.Time
	switch kind {
	case "TIFF":
		var d *directory
		if d, err = openTIFF(s); err == nil {
			t, _, err = d.taken(loc)
		}
	case "PNG":
		p := &pngFile{src: s}
		if err = p.chunks(); err == nil {
			t, _, err = p.taken(loc)
		}
	case "FITS":
		t, err = fitsTag(s)
	default:
		err = fault(ErrStamp, "an %s file stores no time", kind)
	}
	return t, err
}

func fitsTag(s source) (time.Time, error) {
	first, err := readUnit(s, 0)
	if err != nil {
		return time.Time{}, err
	}
	u, _, err := first.image()
	if err != nil {
		u = first // a kind of picture not read here may still tell its time
	}
	t, _, err := fitsTaken(u, first)
	return t, err
}
