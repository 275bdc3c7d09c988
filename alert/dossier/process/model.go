// Package process holds the small linear models of a process that a dossier
// works with: a gain, up to a few lags, a dead time, with or without an
// integrator. Input and output are in percent of span, times in seconds.
package process

import (
	"fmt"
	"math"
	"math/cmplx"
	"slices"
	"strconv"
	"strings"
)

// Model is Gain e^(-ThetaS s) / Π (lag s + 1), over s once more when
// Integrating. Gain is in %/%, of an integrating process in % per second per %.
type Model struct {
	Gain        float64
	LagsS       []float64 // s, largest first
	ThetaS      float64   // s
	Integrating bool
}

// At is the transfer function at s.
func (m Model) At(s complex128) complex128 {
	g := complex(m.Gain, 0) * cmplx.Exp(-s*complex(m.ThetaS, 0))
	for _, l := range m.LagsS {
		g /= 1 + s*complex(l, 0)
	}
	if m.Integrating {
		g /= s
	}
	return g
}

// Magnitude is |G(jw)|, w in rad/s.
func (m Model) Magnitude(w float64) float64 {
	g := math.Abs(m.Gain)
	for _, l := range m.LagsS {
		g /= math.Hypot(1, w*l)
	}
	if m.Integrating {
		g /= w
	}
	return g
}

// Phase is the phase of G(jw) for a positive gain, rad, without jumps.
func (m Model) Phase(w float64) float64 {
	p := -w * m.ThetaS
	for _, l := range m.LagsS {
		p -= math.Atan(w * l)
	}
	if m.Integrating {
		p -= math.Pi / 2
	}
	return p
}

// Ultimate gives gain (%/%), period (s) and frequency (rad/s) at which the loop
// swings on under proportional action alone; ok is false where no gain does it.
func (m Model) Ultimate() (ku, puS, w float64, ok bool) {
	f := func(w float64) float64 { return m.Phase(w) + math.Pi }
	hi := 1e-6
	for f(hi) > 0 {
		hi *= 1.5
		if hi > 1e9 {
			return 0, 0, 0, false
		}
	}
	w = Root(f, hi/1.5, hi)
	return 1 / m.Magnitude(w), 2 * math.Pi / w, w, true
}

// Reduce gives the model with one lag (none when integrating) by the half rule:
// of the largest neglected lag one half goes to the lag kept and one half to the
// dead time, all smaller ones go to the dead time (Skogestad 2003).
func (m Model) Reduce() Model {
	keep := 1
	if m.Integrating {
		keep = 0
	}
	lags := slices.Clone(m.LagsS)
	slices.SortFunc(lags, func(a, b float64) int { return -cmpFloat(a, b) })
	r := Model{Gain: m.Gain, ThetaS: m.ThetaS, Integrating: m.Integrating, LagsS: slices.Clone(lags[:min(keep, len(lags))])}
	for i, l := range lags[len(r.LagsS):] {
		switch {
		case i > 0:
			r.ThetaS += l
		default:
			r.ThetaS += l / 2
			if keep == 1 {
				r.LagsS[0] += l / 2
			}
		}
	}
	return r
}

// Delayed is the model with more dead time, s: half a scan is what a controller
// that holds its output adds.
func (m Model) Delayed(s float64) Model {
	m.ThetaS += s
	return m
}

// Abs is the model with a positive gain: what is left once the action of the
// controller has taken the sign.
func (m Model) Abs() Model {
	m.Gain = math.Abs(m.Gain)
	return m
}

// LagS is the largest lag, s; 0 where there is none.
func (m Model) LagS() float64 {
	if len(m.LagsS) == 0 {
		return 0
	}
	return slices.Max(m.LagsS)
}

// TimeS is the sum of lags and dead time, s: the mean time in which the process
// answers.
func (m Model) TimeS() float64 {
	t := m.ThetaS
	for _, l := range m.LagsS {
		t += l
	}
	return t
}

// String describes the model with its units.
func (m Model) String() string {
	var parts []string
	if m.Integrating {
		parts = append(parts, fmt.Sprintf("integrating, gain %s %%/s per %%", digits(m.Gain)))
	} else {
		parts = append(parts, fmt.Sprintf("gain %s %%/%%", digits(m.Gain)))
	}
	for _, l := range m.LagsS {
		parts = append(parts, fmt.Sprintf("lag %s s", digits(l)))
	}
	return strings.Join(append(parts, fmt.Sprintf("dead time %s s", digits(m.ThetaS))), ", ")
}

func digits(x float64) string {
	r, err := strconv.ParseFloat(strconv.FormatFloat(x, 'g', 3, 64), 64)
	if err != nil {
		return "unknown"
	}
	return strconv.FormatFloat(r, 'f', -1, 64)
}

func cmpFloat(a, b float64) int {
	switch {
	case a < b:
		return -1
	case a > b:
		return 1
	}
	return 0
}

// Root finds a zero of f between a and b, where f changes sign, to the last
// digits.
func Root(f func(float64) float64, a, b float64) float64 {
	fa := f(a)
	for range 200 {
		m := (a + b) / 2
		if m == a || m == b {
			break
		}
		if fm := f(m); (fm > 0) == (fa > 0) {
			a, fa = m, fm
		} else {
			b = m
		}
	}
	return (a + b) / 2
}
