package config

import (
	"errors"
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"
	"time"
)

// Duration is a time span written with its unit, like "5ms" or "1m30s".
type Duration time.Duration

// Std is the same span as the standard library's type.
func (d Duration) Std() time.Duration { return time.Duration(d) }

// String writes the span as Go does; UnmarshalText reads it back exactly.
func (d Duration) String() string { return time.Duration(d).String() }

// MarshalText implements encoding.TextMarshaler.
func (d Duration) MarshalText() ([]byte, error) { return []byte(d.String()), nil }

// UnmarshalText implements encoding.TextUnmarshaler.
func (d *Duration) UnmarshalText(text []byte) error {
	s := strings.TrimSpace(string(text))
	if number.MatchString(s) && s != "0" {
		return errors.New("a time needs a unit (ns, us, ms, s, m, h)")
	}
	v, err := time.ParseDuration(s)
	if err != nil {
		return errors.New("not a time with a unit (ns, us, ms, s, m, h)")
	}
	*d = Duration(v)
	return nil
}

// Size is a number of bytes written with its unit. KB, MB, GB and TB are
// powers of 1000; KiB, MiB, GiB and TiB powers of 1024.
type Size int64

var units = []struct {
	name  string
	bytes int64
}{
	{"TB", 1e12}, {"TiB", 1 << 40}, {"GB", 1e9}, {"GiB", 1 << 30}, {"MB", 1e6},
	{"MiB", 1 << 20}, {"KB", 1e3}, {"KiB", 1 << 10}, {"B", 1},
}

var (
	number = regexp.MustCompile(`^[+-]?[0-9]+(\.[0-9]+)?$`)
	amount = regexp.MustCompile(`^([0-9]+(?:\.[0-9]+)?)\s*([A-Za-z]+)$`)
	share  = regexp.MustCompile(`^([0-9]+(?:\.[0-9]+)?)\s*%$`)
)

// String writes the size in the largest unit that divides it;
// UnmarshalText reads it back exactly.
func (s Size) String() string {
	for _, u := range units {
		if s != 0 && int64(s)%u.bytes == 0 {
			return fmt.Sprintf("%d%s", int64(s)/u.bytes, u.name)
		}
	}
	return fmt.Sprintf("%dB", int64(s))
}

// MarshalText implements encoding.TextMarshaler.
func (s Size) MarshalText() ([]byte, error) { return []byte(s.String()), nil }

// UnmarshalText implements encoding.TextUnmarshaler.
func (s *Size) UnmarshalText(text []byte) error {
	t := strings.TrimSpace(string(text))
	if number.MatchString(t) {
		return errors.New("a size needs a unit (B, KB, MB, GB, TB, KiB, MiB, GiB, TiB)")
	}
	m := amount.FindStringSubmatch(t)
	if m == nil {
		return errors.New("not a size with a unit (B, KB, MB, GB, TB, KiB, MiB, GiB, TiB)")
	}
	for _, u := range units {
		if strings.EqualFold(m[2], u.name) {
			v, err := scale(m[1], u.bytes)
			*s = Size(v)
			return err
		}
	}
	return fmt.Errorf("unknown unit %q (known: B, KB, MB, GB, TB, KiB, MiB, GiB, TiB)", m[2])
}

// scale multiplies a decimal number by a unit, exactly for whole numbers.
func scale(text string, unit int64) (int64, error) {
	if n, err := strconv.ParseInt(text, 10, 64); err == nil && n <= math.MaxInt64/unit {
		return n * unit, nil
	}
	f, err := strconv.ParseFloat(text, 64)
	if err != nil || f*float64(unit) >= math.MaxInt64 {
		return 0, errors.New("the size is too large")
	}
	return int64(math.Round(f * float64(unit))), nil
}

// Percent is an amount of something that has a total: a share of it, like
// "70%", or a size, like "6GB".
type Percent struct {
	// Of is the share in percent. It is 0 if a size was given.
	Of float64

	// Size is the fixed amount, if one was given.
	Size Size
}

// Bytes is the amount for a given total: the share of it, or the size.
func (p Percent) Bytes(total int64) int64 {
	if p.Of > 0 {
		return int64(float64(total) * p.Of / 100)
	}
	return int64(p.Size)
}

// String writes what UnmarshalText reads back exactly.
func (p Percent) String() string {
	if p.Of > 0 {
		return strconv.FormatFloat(p.Of, 'f', -1, 64) + "%"
	}
	return p.Size.String()
}

// MarshalText implements encoding.TextMarshaler.
func (p Percent) MarshalText() ([]byte, error) { return []byte(p.String()), nil }

// UnmarshalText implements encoding.TextUnmarshaler.
func (p *Percent) UnmarshalText(text []byte) error {
	t := strings.TrimSpace(string(text))
	if m := share.FindStringSubmatch(t); m != nil {
		v, err := strconv.ParseFloat(m[1], 64)
		if err != nil {
			return errors.New("not a percentage")
		}
		*p = Percent{Of: v}
		return nil
	}
	if number.MatchString(t) {
		return errors.New(`a number alone could be a share or a size: add "%" or a unit`)
	}
	var s Size
	if err := s.UnmarshalText([]byte(t)); err != nil {
		return fmt.Errorf("neither a percentage nor a size: %w", err)
	}
	*p = Percent{Size: s}
	return nil
}
