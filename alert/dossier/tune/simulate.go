package tune

import (
	"math"
	"math/rand/v2"

	"midwatch/alert/dossier/process"
)

// Setup is what a simulated response starts from. Everything is deviation from
// rest, in percent of span; times in seconds.
type Setup struct {
	SPStep   float64 // %, at the start
	LoadStep float64 // %, at the process input, at the start
	OPLow    float64 // room for OP below where it rests, %, negative; -Inf: none
	OPHigh   float64 // room above
	ScanS    float64 // controller interval; 0: continuous, that is every step
	SpanS    float64
	StepS    float64 // of the simulation; 0: chosen
	NoisePct float64 // white noise of PV per scan, one standard deviation
	Seed     uint64
}

// Trace is a simulated response, DT seconds apart, from the end of the first
// step on.
type Trace struct {
	DT     float64
	PV, OP []float64 // %
}

// Simulate runs a PI or PID law, P and I on the error, D on PV, position form,
// the integral held while OP is at a limit that the error pushes towards.
func Simulate(m process.Model, t Tuning, o Setup) Trace {
	h := o.StepS
	if h <= 0 {
		h = math.Max(m.TimeS(), o.ScanS) / 400
		if m.ThetaS > 0 {
			h = math.Min(h, math.Max(m.ThetaS/20, o.SpanS/20000))
		}
		h = math.Max(h, o.SpanS/50000)
	}
	every := 1
	if o.ScanS > h {
		every = int(math.Ceil(o.ScanS/h - 1e-9))
		h = o.ScanS / float64(every)
	}
	dt := h * float64(every)
	n := int(math.Round(o.SpanS / h))
	p := process.NewPlant(m, h)
	r := rand.New(rand.NewPCG(o.Seed, 1))
	tr := Trace{DT: h, PV: make([]float64, n), OP: make([]float64, n)}
	pv, op, sum, dlag, lastPV := 0.0, 0.0, 0.0, 0.0, 0.0
	low, high := o.OPLow, o.OPHigh
	if low == 0 && high == 0 {
		low, high = math.Inf(-1), math.Inf(1)
	}
	for k := range n {
		if k%every == 0 {
			seen := pv
			if o.NoisePct > 0 {
				seen += o.NoisePct * r.NormFloat64()
			}
			e := o.SPStep - seen
			add := 0.0
			if !math.IsInf(t.TiS, 1) {
				add = t.Kc * e * dt / t.TiS
			}
			if t.TdS > 0 {
				f := t.TdS / 10
				dlag += (seen - lastPV - dlag) * dt / (f + dt)
				lastPV = seen
			}
			d := 0.0
			if t.TdS > 0 {
				d = t.Kc * t.TdS * dlag / dt
			}
			u := t.Kc*e + sum + add - d
			switch {
			case u > high:
				op = high
				if add < 0 {
					sum += add
				}
			case u < low:
				op = low
				if add > 0 {
					sum += add
				}
			default:
				op = u
				sum += add
			}
		}
		pv = p.Step(op + o.LoadStep)
		tr.PV[k], tr.OP[k] = pv, op
	}
	return tr
}

// StepMetrics sum up a set-point response; times s, NaN where not reached.
type StepMetrics struct {
	OvershootPct float64 // % of the step
	RiseS        float64 // 10 to 90 %
	SettleS      float64 // to stay within 2 %
	IAE          float64 // % s per % of step
	OPMost       float64 // %, largest move of OP from rest
}

// SetPoint sums up a response to a set-point step of size sp (%).
func (t Trace) SetPoint(sp float64) (m StepMetrics) {
	m.RiseS, m.SettleS = math.NaN(), math.NaN()
	most, t10, t90, last := math.Inf(-1), -1, -1, -1
	for k, v := range t.PV {
		y := v / sp
		most = math.Max(most, y)
		if t10 < 0 && y >= 0.1 {
			t10 = k
		}
		if t90 < 0 && y >= 0.9 {
			t90 = k
		}
		if math.Abs(y-1) > 0.02 {
			last = k
		}
		m.IAE += math.Abs(1-y) * t.DT
		m.OPMost = math.Max(m.OPMost, math.Abs(t.OP[k]))
	}
	m.OvershootPct = 100 * (most - 1)
	if t10 >= 0 && t90 >= 0 {
		m.RiseS = float64(t90-t10) * t.DT
	}
	if last < len(t.PV)-1 {
		m.SettleS = float64(last+1) * t.DT
	}
	return m
}

// LoadMetrics sum up a load response; times s, NaN where not reached.
type LoadMetrics struct {
	PeakPct  float64 // %, largest deviation of PV
	PeakS    float64
	IAE      float64 // % s
	RecoverS float64 // last time above a tenth of the peak
}

// Load sums up a response to a load step.
func (t Trace) Load() (m LoadMetrics) {
	at := 0
	for k, v := range t.PV {
		if a := math.Abs(v); a > m.PeakPct {
			m.PeakPct, at = a, k
		}
		m.IAE += math.Abs(v) * t.DT
	}
	m.PeakS, m.RecoverS = float64(at+1)*t.DT, math.NaN()
	last := 0
	for k, v := range t.PV {
		if math.Abs(v) > 0.1*m.PeakPct {
			last = k
		}
	}
	if last < len(t.PV)-1 {
		m.RecoverS = float64(last+1) * t.DT
	}
	return m
}

// OPNoise is the movement of OP that noise alone makes: one standard deviation,
// %, and travel, % per hour.
func (t Trace) OPNoise() (rmsPct, travelPerHour float64) {
	skip := len(t.OP) / 4
	if len(t.OP)-skip < 2 {
		return math.NaN(), math.NaN()
	}
	sum, sq, way := 0.0, 0.0, 0.0
	x := t.OP[skip:]
	for k, v := range x {
		sum += v
		if k > 0 {
			way += math.Abs(v - x[k-1])
		}
	}
	mean := sum / float64(len(x))
	for _, v := range x {
		sq += (v - mean) * (v - mean)
	}
	return math.Sqrt(sq / float64(len(x))), way / (float64(len(x)) * t.DT) * 3600
}
