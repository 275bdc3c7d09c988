package quality

import (
	"math"
	"math/cmplx"
)

type class uint8

const (
	lagging class = iota
	integrating
	runaway
)

// curve is a static map with slope 1 at the operating point, so that the linear
// analysis holds there.
type curve struct {
	kind curveKind
	a, b float64
}

type curveKind uint8

const (
	straight curveKind = iota
	equalPercent
	titration
	squareLaw
	splitCurve
	scaled
)

func (c *curve) at(z float64) float64 {
	switch c.kind {
	case equalPercent: // a = rangeability
		l := math.Log(c.a)
		return 100 / l * (math.Exp(l*z/100) - 1)
	case titration: // a = half height, b = distance of the operating point from the steepest one
		h := math.Cosh(c.b / c.a)
		return c.a * (math.Tanh((z+c.b)/c.a) - math.Tanh(c.b/c.a)) * h * h
	case squareLaw: // a = flow at the operating point, %
		f := math.Max(0, c.a+z*50/c.a)
		return (f*f - c.a*c.a) / 100
	case splitCurve: // a = gain beyond the split, b = where the split is
		if (c.b >= 0 && z > c.b) || (c.b < 0 && z < c.b) {
			return c.b + (z-c.b)*c.a
		}
	case scaled:
		return z * c.a
	}
	return z
}

// process is K*(1+lead*s)/prod(1+lag*s)*exp(-theta*s), with 1/s when
// integrating (K then in %/s per %), and 1/(lag0*s-1) when runaway.
type process struct {
	class      class
	k          float64 // signed: negative for direct action
	lags       []float64
	lead       float64
	theta      float64
	in, out    curve
	u0, y0     float64
	loadBefore bool // the load passes the dead time, too

	h    float64
	x    [6]float64
	a    [6]float64
	acc  float64
	buf  []float64
	head int
}

func (p *process) start(h float64) {
	p.h = h
	for i, l := range p.lags {
		p.a[i] = -math.Expm1(-h / l)
	}
	if p.class == runaway {
		p.a[0] = math.Expm1(h / p.lags[0])
	}
	p.buf = make([]float64, max(1, int(math.Round(p.theta/h))))
}

// step moves the process by h under a stem position and a load (both % of OP)
// and gives PV.
func (p *process) step(stem, load float64) float64 {
	v := p.in.at(stem - p.u0)
	if p.loadBefore {
		v += load
	}
	w := p.buf[p.head]
	p.buf[p.head] = v
	if p.head++; p.head == len(p.buf) {
		p.head = 0
	}
	if !p.loadBefore {
		w += load
	}
	// Each stage hands on the mean over the scan, so that a chain of stages does
	// not gain phase; PV is the value at its end.
	i, end := 0, w
	if p.class == runaway {
		x := p.x[0]
		p.x[0] = min(max(x+p.a[0]*(w+x), -60), 60)
		w, end, i = (x+p.x[0])/2, p.x[0], 1
	}
	for ; i < len(p.lags); i++ {
		x := p.x[i]
		nx := x + p.a[i]*(w-x)
		p.x[i], end = nx, nx
		mean := (x + nx) / 2
		if i == 0 && p.lead != 0 {
			end += p.lead / p.lags[0] * (w - nx)
			mean += p.lead / p.lags[0] * (w - mean)
		}
		w = mean
	}
	if p.class == integrating {
		p.acc = min(max(p.acc+p.k*w*p.h, -2-p.y0), 102-p.y0)
		return p.y0 + p.out.at(p.acc)
	}
	return p.y0 + p.out.at(p.k*end)
}

// response is |K| normalised to reverse action, at s, with the extra delay and
// lag of scan and filter.
func (p *process) response(s complex128, extraDelay float64, extraLags ...float64) complex128 {
	g := complex(math.Abs(p.k), 0) * cmplx.Exp(-s*complex(p.theta+extraDelay, 0)) * (1 + s*complex(p.lead, 0))
	for i, l := range p.lags {
		if i == 0 && p.class == runaway {
			g /= s*complex(l, 0) - 1
			continue
		}
		g /= 1 + s*complex(l, 0)
	}
	for _, l := range extraLags {
		g /= 1 + s*complex(l, 0)
	}
	if p.class == integrating {
		g /= s
	}
	return g
}

// fopdt is the half-rule model: gain (or slope), lag and dead time.
func (p *process) fopdt(extraDelay float64) (k, tau, theta float64) {
	k, theta = math.Abs(p.k), p.theta+extraDelay
	if p.lead < 0 {
		theta -= p.lead
	}
	lags := p.lags
	if p.class == integrating {
		for _, l := range lags {
			theta += l
		}
		return k, math.Inf(1), theta
	}
	for i, l := range lags {
		switch i {
		case 0:
			tau = l
		case 1:
			tau += l / 2
			theta += l / 2
		default:
			theta += l
		}
	}
	return k, tau, theta
}
