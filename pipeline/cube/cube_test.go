package cube

import (
	"math"
	"testing"
)

func valid() *Cube {
	c := New(2, 2, 3)
	c.Time, c.Edges = []float64{0.5, 2}, []float64{0, 1, 3}
	for j := range c.Data {
		c.Data[j] = float32(j)
	}
	return c
}

func TestLayout(t *testing.T) {
	c := valid()
	if got := c.At(1, 1, 2); got != 11 {
		t.Errorf("At(1,1,2) = %v, want the last of 12 values", got)
	}
	if got := c.Sum(0); got != 15 {
		t.Errorf("Sum(0) = %v, want 15", got)
	}
	if got := c.Total(); got != 66 {
		t.Errorf("Total = %v, want 66", got)
	}
	if got := c.Duration(1); got != 2 {
		t.Errorf("Duration(1) = %v, want 2", got)
	}
	c.Frame(1)[0] = 100
	if c.At(1, 0, 0) != 100 {
		t.Error("Frame does not alias the cube")
	}
}

func TestCheck(t *testing.T) {
	cases := map[string]func(*Cube){
		"data":   func(c *Cube) { c.Data = c.Data[1:] },
		"errors": func(c *Cube) { c.Errors = make([]float32, 1) },
		"edges":  func(c *Cube) { c.Edges = c.Edges[:2] },
		"order":  func(c *Cube) { c.Time[1] = 0.9 },
		"nan":    func(c *Cube) { c.Data[3] = float32(math.NaN()) },
		"inf":    func(c *Cube) { c.Data[3] = float32(math.Inf(1)) },
		"side":   func(c *Cube) { c.T = 0 },
		"axis":   func(c *Cube) { c.Edges[0] = math.NaN() },
	}
	if err := valid().Check(); err != nil {
		t.Fatalf("a valid cube: %v", err)
	}
	for name, spoil := range cases {
		c := valid()
		spoil(c)
		if c.Check() == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

func TestNewPanicsOnShape(t *testing.T) {
	defer func() {
		if recover() != ErrShape {
			t.Error("New(0, 1, 1) did not panic with ErrShape")
		}
	}()
	New(0, 1, 1)
}
