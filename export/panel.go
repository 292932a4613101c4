package export

import (
	"image"
	"math"
)

// The margins of a panel: room for tick labels, axis titles and a heading.
const (
	panelLeft   = 78
	panelBottom = 62
	panelTop    = 34
)

// axisUnit is what the sides of a panel are marked in.
type axisUnit struct {
	name string
	step float64 // per pixel
}

func sceneUnit(scale float64) axisUnit {
	if scale > 0 {
		return axisUnit{"µm", scale}
	}
	return axisUnit{"px", 1}
}

// panel draws a plane with axes and a heading; p is the corner of the plane
// itself. It returns the plane's rectangle.
func (c *canvas) panel(p image.Point, pl plane, f fit, m *colours, u axisUnit, heading string) image.Rectangle {
	box := c.heat(p, pl, f, m)
	c.frame(box, ink)
	c.text(box.Min.X, box.Min.Y-12, sizeLabel, left, ink, heading)
	per := float64(f.up) / float64(f.down) / u.step // screen pixels per unit
	half := float64(f.up) / float64(f.down) / 2     // pixel 0's centre
	at, text := ticks(0, float64(pl.w-1)*u.step+0.5*u.step)
	at, text = thin(at, text, per, 60)
	for i, v := range at {
		x := box.Min.X + int(math.Round(v*per+half))
		c.fill(image.Rect(x, box.Max.Y, x+1, box.Max.Y+7), ink)
		c.text(x, box.Max.Y+8+sizeSmall, sizeSmall, middle, ink, text[i])
	}
	at, text = ticks(0, float64(pl.h-1)*u.step+0.5*u.step)
	at, text = thin(at, text, per, 30)
	wide := 0
	for i, v := range at {
		y := box.Min.Y + int(math.Round(v*per+half))
		c.fill(image.Rect(box.Min.X-7, y, box.Min.X, y+1), ink)
		c.text(box.Min.X-11, y+sizeSmall/3, sizeSmall, right, ink, text[i])
		wide = max(wide, c.width(sizeSmall, text[i]))
	}
	c.text((box.Min.X+box.Max.X)/2, box.Max.Y+8+sizeSmall+sizeLabel+6, sizeLabel, middle, ink, "x ("+u.name+")")
	c.upright(box.Min.X-11-wide-16, (box.Min.Y+box.Max.Y)/2, sizeLabel, ink, "y ("+u.name+")")
	return box
}

// thin drops ticks until neighbours are least pixels apart.
func thin(at []float64, text []string, per float64, least float64) ([]float64, []string) {
	for len(at) > 1 && (at[1]-at[0])*per < least {
		var a []float64
		var t []string
		for i := 0; i < len(at); i += 2 {
			a, t = append(a, at[i]), append(t, text[i])
		}
		at, text = a, t
	}
	return at, text
}
