package config

import (
	"testing"
	"time"
)

func TestSize(t *testing.T) {
	for text, want := range map[string]Size{
		"0B": 0, "1B": 1, "2GB": 2e9, "2 GiB": 2 << 30, "1.5kb": 1500, "0.5TiB": 1 << 39,
		"9007199254740993B": 9007199254740993, // 2^53 + 1: no detour over floats
	} {
		var s Size
		if err := s.UnmarshalText([]byte(text)); err != nil || s != want {
			t.Errorf("%q: got %d, %v, want %d", text, s, err, want)
		}
		var again Size
		if err := again.UnmarshalText([]byte(s.String())); err != nil || again != s {
			t.Errorf("%q is written as %q, which reads %d, %v", text, s, again, err)
		}
	}
	for _, text := range []string{"", "5", "-1GB", "1e3B", "GB", "5 G", "99999999999TB", "NaNB", "5GB 3"} {
		var s Size
		if err := s.UnmarshalText([]byte(text)); err == nil {
			t.Errorf("%q accepted as %d", text, s)
		}
	}
}

func TestPercent(t *testing.T) {
	for text, want := range map[string]Percent{
		"70%": {Of: 70}, "12.5 %": {Of: 12.5}, "6GB": {Size: 6e9},
	} {
		var p Percent
		if err := p.UnmarshalText([]byte(text)); err != nil || p != want {
			t.Errorf("%q: got %+v, %v, want %+v", text, p, err, want)
		}
		var again Percent
		if err := again.UnmarshalText([]byte(p.String())); err != nil || again != p {
			t.Errorf("%q is written as %q", text, p)
		}
	}
	for _, text := range []string{"", "70", "%", "-5%", "x%", "1e1%", "70 percent"} {
		var p Percent
		if err := p.UnmarshalText([]byte(text)); err == nil {
			t.Errorf("%q accepted as %+v", text, p)
		}
	}
	if got := (Percent{Of: 25}).Bytes(1000); got != 250 {
		t.Errorf("25%% of 1000 B is %d B", got)
	}
	if got := (Percent{Size: 7}).Bytes(1000); got != 7 {
		t.Errorf("7 B of 1000 B is %d B", got)
	}
}

func TestDuration(t *testing.T) {
	for text, want := range map[string]time.Duration{
		"5ms": 5 * time.Millisecond, "1m30s": 90 * time.Second, "0s": 0, "250us": 250 * time.Microsecond, "-1s": -time.Second,
	} {
		var d Duration
		if err := d.UnmarshalText([]byte(text)); err != nil || d.Std() != want {
			t.Errorf("%q: got %v, %v, want %v", text, d, err, want)
		}
	}
	for _, text := range []string{"", "5", "5 minutes", "1d", "ms"} {
		var d Duration
		if err := d.UnmarshalText([]byte(text)); err == nil {
			t.Errorf("%q accepted as %v", text, d)
		}
	}
}
