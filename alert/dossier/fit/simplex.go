package fit

import (
	"math"
	"slices"
)

// simplex finds a least value of f near x by the method of Nelder & Mead 1965.
// It is our own because the library's would link a distribution package and
// its dependencies for forty lines.
func simplex(f func([]float64) float64, x []float64, size float64, most int) []float64 {
	n := len(x)
	type corner struct {
		x []float64
		f float64
	}
	c := []corner{{slices.Clone(x), f(x)}}
	for i := range n {
		y := slices.Clone(x)
		y[i] += size
		c = append(c, corner{y, f(y)})
	}
	used := n + 1
	for used < most {
		slices.SortStableFunc(c, func(a, b corner) int {
			switch {
			case a.f < b.f:
				return -1
			case a.f > b.f:
				return 1
			}
			return 0
		})
		width := 0.0
		for i := range n {
			width = math.Max(width, math.Abs(c[n].x[i]-c[0].x[i]))
		}
		if c[n].f-c[0].f < 1e-10 && width < 1e-4 || width < 1e-7 {
			break
		}
		mid := make([]float64, n)
		for _, p := range c[:n] {
			for i, v := range p.x {
				mid[i] += v / float64(n)
			}
		}
		along := func(k float64) corner {
			y := make([]float64, n)
			for i := range y {
				y[i] = mid[i] + k*(c[n].x[i]-mid[i])
			}
			used++
			return corner{y, f(y)}
		}
		r := along(-1)
		switch {
		case r.f < c[0].f:
			if e := along(-2); e.f < r.f {
				r = e
			}
			c[n] = r
		case r.f < c[n-1].f:
			c[n] = r
		default:
			k := along(0.5)
			if r.f < c[n].f {
				k = along(-0.5)
			}
			if k.f < math.Min(r.f, c[n].f) {
				c[n] = k
				continue
			}
			for j := 1; j <= n; j++ {
				for i := range n {
					c[j].x[i] = c[0].x[i] + (c[j].x[i]-c[0].x[i])/2
				}
				c[j].f = f(c[j].x)
				used++
			}
		}
	}
	best := c[0]
	for _, p := range c[1:] {
		if p.f < best.f {
			best = p
		}
	}
	return best.x
}
