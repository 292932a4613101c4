package daemon

import (
	"errors"
	"testing"

	"go.uber.org/zap"
	"go.uber.org/zap/zaptest/observer"
)

func TestTroubleIsSaidOnce(t *testing.T) {
	core, logs := observer.New(zap.InfoLevel)
	tr := newTrouble(zap.New(core))
	tr.note("a", "disk", nil)
	for range 5 {
		tr.note("a", "disk", errors.New("only 1 MB free"))
	}
	tr.note("b", "disk", errors.New("away"))
	tr.note("a", "bundle", errors.New("none"))
	tr.note("a", "disk", nil)
	tr.note("a", "disk", nil)
	var got []string
	for _, e := range logs.All() {
		got = append(got, e.Message)
	}
	want := []string{"shots must wait", "shots must wait", "shots must wait", "shots go on"}
	if len(got) != len(want) {
		t.Fatalf("logged %q, want %q", got, want)
	}
	for i := range want {
		if got[i] != want[i] {
			t.Errorf("line %d: %q, want %q", i, got[i], want[i])
		}
	}
}
