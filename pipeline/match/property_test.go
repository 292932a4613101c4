package match

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"os/exec"
	"reflect"
	"slices"
	"testing"
	"time"
)

// cloud is a random, crowded set of frames of both arms.
func cloud(rng *rand.Rand, n int, span time.Duration) (s, r []Frame) {
	for i := range n {
		f := timed(int64(i), time.Duration(rng.Int64N(int64(span))))
		switch rng.IntN(10) {
		case 0:
			f.Shot, f.HasShot = rng.Int64N(int64(n)), true
		case 1:
			f.Shot, f.HasShot, f.HasTime = rng.Int64N(int64(n)), true, false
		case 2:
			f.Time = f.Time.Truncate(ms) // ties
		}
		if rng.IntN(2) == 0 {
			s = append(s, f)
		} else {
			r = append(r, f)
		}
	}
	return s, r
}

func TestProperties(t *testing.T) {
	const seed = 11
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 0))
	seen := Result{}
	for range 2000 {
		s, r := cloud(rng, rng.IntN(60), time.Duration(1+rng.IntN(300))*ms)
		now := at(time.Duration(rng.IntN(40)) * time.Second)
		res := Match(s, r, now, usual)
		seen.Pairs, seen.Held, seen.Lone = append(seen.Pairs, res.Pairs...), append(seen.Held, res.Held...), append(seen.Lone, res.Lone...)
		everyFrameOnce(t, s, r, res)
		pairsAllowed(t, s, r, res)

		rng.Shuffle(len(s), func(i, j int) { s[i], s[j] = s[j], s[i] })
		rng.Shuffle(len(r), func(i, j int) { r[i], r[j] = r[j], r[i] })
		if again := Match(s, r, now, usual); !reflect.DeepEqual(res, again) {
			t.Fatalf("depends on the order:\n%+v\n%+v", res, again)
		}
		shift := time.Duration(rng.Int64N(int64(2*time.Hour))) - time.Hour
		o := usual
		o.Clock.Offset = -shift
		moved := slices.Clone(s)
		for i := range moved {
			moved[i].Time = moved[i].Time.Add(shift)
		}
		if again := Match(moved, r, now, o); !reflect.DeepEqual(res, again) {
			t.Fatalf("depends on a shift of one clock:\n%+v\n%+v", res, again)
		}
	}
	if len(seen.Pairs) < 1000 || len(seen.Held) < 1000 || len(seen.Lone) < 1000 {
		t.Errorf("too few cases of a kind: %d pairs, %d held, %d lone", len(seen.Pairs), len(seen.Held), len(seen.Lone))
	}
}

func everyFrameOnce(t *testing.T, s, r []Frame, res Result) {
	t.Helper()
	var got, want []int64
	for _, p := range res.Pairs {
		got = append(got, p.Streak, p.Reference)
	}
	for _, l := range res.Lone {
		got = append(got, l.ID)
	}
	for _, h := range res.Held {
		got = append(append(got, h.Streak...), h.Reference...)
	}
	got = append(got, res.Waiting...)
	for _, f := range append(slices.Clone(s), r...) {
		want = append(want, f.ID)
	}
	slices.Sort(got)
	slices.Sort(want)
	if !slices.Equal(got, want) {
		t.Fatalf("frames placed %v, given %v", got, want)
	}
}

func pairsAllowed(t *testing.T, s, r []Frame, res Result) {
	t.Helper()
	byID := map[int64]Frame{}
	for _, f := range append(slices.Clone(s), r...) {
		byID[f.ID] = f
	}
	for _, p := range res.Pairs {
		a, b := byID[p.Streak], byID[p.Reference]
		if a.HasShot && b.HasShot && a.Shot != b.Shot {
			t.Fatalf("numbers differ: %+v %+v", a, b)
		}
		if a.HasTime && b.HasTime && b.Time.Sub(a.Time).Abs() > usual.Within {
			t.Fatalf("gap too large: %+v %+v", a, b)
		}
		if a.HasTime && b.HasTime && b.Time.Sub(a.Time) != p.Gap {
			t.Fatalf("gap %v: %+v %+v", p.Gap, a, b)
		}
	}
}

// optimum tries every one-to-one assignment, crossing ones included.
func optimum(w [][]int64, i int, used []bool) int64 {
	if i == len(w) {
		return 0
	}
	best := optimum(w, i+1, used)
	for j := range used {
		if !used[j] && w[i][j] > 0 {
			used[j] = true
			best = max(best, w[i][j]+optimum(w, i+1, used))
			used[j] = false
		}
	}
	return best
}

// problem makes two sorted lists, their weights and what chain finds.
func problem(rng *rand.Rand, n, m int, span int64, within int64) (w [][]int64, got int64, err error) {
	list := func(n int) []*item {
		out := make([]*item, n)
		for i := range out {
			out[i] = &item{t: rng.Int64N(span)}
		}
		slices.SortFunc(out, func(a, b *item) int { return int(a.t - b.t) })
		return out
	}
	s, r := list(n), list(m)
	edges, ok := candidates(s, r, within, func(_, _ *item) bool { return true })
	if !ok {
		return nil, 0, fmt.Errorf("too many candidates")
	}
	w = make([][]int64, n)
	for i := range w {
		w[i] = make([]int64, m)
		for j := range w[i] {
			w[i][j] = max(0, within+1-max(s[i].t-r[j].t, r[j].t-s[i].t))
		}
	}
	lastS, lastR := -1, -1
	for _, e := range chain(edges, m, within) {
		if edges[e].s <= lastS || edges[e].r <= lastR {
			return nil, 0, fmt.Errorf("chain not increasing")
		}
		lastS, lastR = edges[e].s, edges[e].r
		got += w[lastS][lastR]
	}
	return w, got, nil
}

func TestChainAgainstAllAssignments(t *testing.T) {
	const seed = 12
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 0))
	for range 3000 {
		w, got, err := problem(rng, rng.IntN(7), rng.IntN(7), 1+rng.Int64N(100), rng.Int64N(30))
		if err != nil {
			t.Fatal(err)
		}
		m := 0
		if len(w) > 0 {
			m = len(w[0])
		}
		if want := optimum(w, 0, make([]bool, m)); got != want {
			t.Fatalf("got %d, want %d for %v", got, want, w)
		}
	}
}

// TestChainAgainstAssignmentSolver compares larger cases with
// scipy.optimize.linear_sum_assignment, which knows nothing of order.
func TestChainAgainstAssignmentSolver(t *testing.T) {
	const seed = 13
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 0))
	var weights [][][]int64
	var got []int64
	for range 20 {
		w, g, err := problem(rng, 100+rng.IntN(50), 100+rng.IntN(50), 10_000, 500)
		if err != nil {
			t.Fatal(err)
		}
		weights, got = append(weights, w), append(got, g)
	}
	in, err := json.Marshal(weights)
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command("/usr/bin/python3", "-c", `
import json, sys
import numpy as np
from scipy.optimize import linear_sum_assignment
out = []
for w in json.load(sys.stdin):
    w = np.array(w)
    i, j = linear_sum_assignment(w, maximize=True)
    out.append(int(w[i, j].sum()))
print(json.dumps(out))`)
	cmd.Stdin = bytes.NewReader(in)
	text, err := cmd.Output()
	if err != nil {
		t.Fatalf("run scipy (Debian packages python3-numpy, python3-scipy): %v", err)
	}
	var want []int64
	if err := json.Unmarshal(text, &want); err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(got, want) {
		t.Errorf("got %v, want %v", got, want)
	}
}

// campaign is n shots at an interval, each arm losing 2 % of its frames and
// with normal jitter of 1 ms on each pair. Frame 2i and 2i+1 are shot i.
func campaign(rng *rand.Rand, n int, interval func(i int) time.Duration) (s, r []Frame, both int) {
	t := time.Duration(0)
	for i := range n {
		t += interval(i)
		a, b := rng.Float64() >= 0.02, rng.Float64() >= 0.02
		if a {
			s = append(s, timed(int64(2*i), t))
		}
		if b {
			r = append(r, timed(int64(2*i+1), t+time.Duration(rng.NormFloat64()*float64(ms))))
		}
		if a && b {
			both++
		}
	}
	return s, r, both
}

func TestCampaign(t *testing.T) {
	const seed = 14
	t.Logf("seed %d", seed)
	second := func(int) time.Duration { return time.Second }
	burst := func(i int) time.Duration { // 20 shots at 10 Hz, then a minute
		if i%20 == 0 {
			return time.Minute
		}
		return 100 * ms
	}
	for name, interval := range map[string]func(int) time.Duration{"1 Hz": second, "bursts at 10 Hz": burst} {
		t.Run(name, func(t *testing.T) {
			s, r, both := campaign(rand.New(rand.NewPCG(seed, 0)), 10_000, interval)
			res := Match(s, r, at(1e6*time.Second), usual)
			for _, p := range res.Pairs {
				if p.Reference != p.Streak+1 {
					t.Errorf("wrong pair %+v", p)
				}
			}
			// Beyond 5 standard deviations lie 6e-7 of all pairs, so none
			// of 10,000 may be missing with this seed.
			if len(res.Pairs) != both || len(res.Held) != 0 || len(res.Lone) != len(s)+len(r)-2*both {
				t.Errorf("%d pairs of %d, %d held, %d lone", len(res.Pairs), both, len(res.Held), len(res.Lone))
			}
		})
	}
}

// TestCampaignLive feeds the frames in the order in which their files come,
// each up to 3 s late, and takes pairs as soon as they are given.
func TestCampaignLive(t *testing.T) {
	const seed = 15
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 0))
	s, r, both := campaign(rng, 2000, func(int) time.Duration { return 100 * ms })
	type arrival struct {
		f   Frame
		arm int
	}
	var all []arrival
	for arm, list := range [][]Frame{s, r} {
		for _, f := range list {
			f.Seen = f.Time.Add(time.Duration(rng.Int64N(int64(3 * time.Second))))
			all = append(all, arrival{f, arm})
		}
	}
	slices.SortFunc(all, func(a, b arrival) int { return a.f.Seen.Compare(b.f.Seen) })
	var pending [2][]Frame
	pairs := 0
	for _, a := range all {
		pending[a.arm] = append(pending[a.arm], a.f)
		res := Match(pending[streak], pending[reference], a.f.Seen, usual)
		gone := map[int64]bool{}
		for _, p := range res.Pairs {
			if p.Reference != p.Streak+1 {
				t.Errorf("wrong pair %+v", p)
			}
			pairs++
			gone[p.Streak], gone[p.Reference] = true, true
		}
		for _, l := range res.Lone {
			gone[l.ID] = true
		}
		for i := range pending {
			pending[i] = slices.DeleteFunc(pending[i], func(f Frame) bool { return gone[f.ID] })
		}
	}
	if pairs != both {
		t.Errorf("%d pairs of %d", pairs, both)
	}
}

var sink Result

func BenchmarkMatch(b *testing.B) {
	for _, c := range []struct {
		name     string
		interval time.Duration
	}{{"apart", time.Second}, {"crowded", ms}} {
		b.Run(c.name, func(b *testing.B) {
			s, r, _ := campaign(rand.New(rand.NewPCG(16, 0)), 25_000, func(int) time.Duration { return c.interval })
			b.ReportAllocs()
			for b.Loop() {
				sink = Match(s, r, at(1e6*time.Second), usual)
			}
		})
	}
}
