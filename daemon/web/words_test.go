package web

import (
	"math"
	"testing"
	"time"
)

func TestHealthLine(t *testing.T) {
	const s, m = time.Second, time.Minute
	for _, c := range []struct {
		name string
		q    Queue
		want health
	}{
		{"idle", Queue{}, health{levelIdle, "idle", "none waiting"}},
		{"idle, once busy", Queue{Last: start}, health{levelIdle, "idle", "none waiting, last shot done 14:02:11"}},
		{"idle since another day", Queue{Last: start.Add(-24 * time.Hour)}, health{levelIdle, "idle", "none waiting, last shot done 3 Mar 14:02"}},
		{"one waits", Queue{Waiting: 1, Oldest: 4 * s}, health{levelGood, "keeping up", "1 waiting for 4 s"}},
		{"some wait", Queue{Waiting: 3, Oldest: 4 * s}, health{levelGood, "keeping up", "3 waiting, oldest 4 s"}},
		{"one runs", Queue{Running: 1}, health{levelGood, "keeping up", "none waiting, 1 running"}},
		{"at the limit", Queue{Waiting: 90, Oldest: m, Running: 2}, health{levelGood, "keeping up", "90 waiting, oldest 1 min, 2 running"}},
		{"late", Queue{Waiting: 41, Oldest: 6*m + s, Running: 2, Slots: 2, PerShot: 40 * s},
			health{levelWarn, "falling behind", "41 waiting, oldest 6 min 1 s, about 14 min of work, 2 running"}},
		{"late, pace unknown", Queue{Waiting: 2, Oldest: 61 * s, Running: 1}, health{levelWarn, "falling behind", "2 waiting, oldest 1 min 1 s, 1 running"}},
		{"late and nothing runs", Queue{Waiting: 3, Oldest: 5 * m}, health{levelBad, "standing still", "nothing is being worked on, 3 waiting, oldest 5 min"}},
		{"stopped", Queue{Stopped: "the disk for results is full", Waiting: 3, Oldest: 5 * s}, health{levelBad, "standing still", "the disk for results is full, 3 waiting, oldest 5 s"}},
		{"retries", Queue{Retrying: 2}, health{levelGood, "keeping up", "none waiting, 2 to be tried again"}},
	} {
		if got := healthOf(c.q, m, start); got != c.want {
			t.Errorf("%s: got %q, want %q", c.name, got, c.want)
		}
	}
}

// The rounding follows JCGM 100:2008, 7.2.6: its example gives y = 10,057 62
// ohm with u = 27 milliohm as 10,058 ohm.
func TestNumber(t *testing.T) {
	nan := math.NaN()
	for _, c := range []struct {
		v, s float64
		unit string
		want string
	}{
		{10.05762, 0.027, "Ω", "10.058 ± 0.027 Ω"},
		{12.3456, 0.21, "ps", "12.35 ± 0.21 ps"},
		{12.3456, 2.149, "ps", "12.3 ± 2.1 ps"},
		{1234.4, 56, "px", "1234 ± 56 px"},
		{12344, 561, "px", "12340 ± 560 px"},
		{0.5, 0.0996, "", "0.50 ± 0.10"},
		{0.5, 0.00994, "", "0.5000 ± 0.0099"},
		{-0.004, 0.12, "px", "0.00 ± 0.12 px"},
		{-3.2, 0.12, "px", "−3.20 ± 0.12 px"},
		{4.1234e6, 2.3e4, "pe", "(4.123 ± 0.023) × 10⁶ pe"},
		{2e-7, 3e-8, "m", "(2.00 ± 0.30) × 10⁻⁷ m"},
		{0, 5, "ps", "0.0 ± 5.0 ps"},
		{3.14159, nan, "ps", "3.142 ps"},
		{3.14159, 0, "ps", "3.142 ps"},
		{3, nan, "ps", "3 ps"},
		{0, 0, "", "0"},
		{1.5e9, math.Inf(1), "", "1.5 × 10⁹"},
		{nan, 1, "ps", "—"}, {math.Inf(1), 1, "ps", "—"},
	} {
		if got := number(Quantity{Value: c.v, Sigma: c.s, Unit: c.unit}).String(); got != c.want {
			t.Errorf("%v ± %v: got %q, want %q", c.v, c.s, got, c.want)
		}
	}
}

func TestDurations(t *testing.T) {
	for d, want := range map[time.Duration]string{-time.Second: "0 s", 900 * time.Millisecond: "0 s", 59 * time.Second: "59 s",
		61 * time.Second: "1 min 1 s", 11*time.Minute + 3*time.Second: "11 min", 2 * time.Hour: "2 h", 125 * time.Minute: "2 h 5 min", 49 * time.Hour: "2 d 1 h"} {
		if got := age(d); got != want {
			t.Errorf("age(%v) = %q, want %q", d, got, want)
		}
	}
	for d, want := range map[time.Duration]string{0: "0 s", 1500: "1.5 µs", -1820 * time.Microsecond: "-1.82 ms", 41 * time.Second: "41 s", 90 * time.Second: "1 min 30 s"} {
		if got := took(d); got != want {
			t.Errorf("took(%v) = %q, want %q", d, got, want)
		}
	}
	for n, want := range map[int64]string{0: "0 B", 999: "999 B", 1000: "1 kB", 999_600: "1 MB", 48_123_456: "48.1 MB", 5_400_000_000: "5.4 GB", 2e15: "2000 TB"} {
		if got := size(n); got != want {
			t.Errorf("size(%d) = %q, want %q", n, got, want)
		}
	}
}
