package detect

import "math"

// The range that is said of a tuning holds the readings of its scale, and what every one of
// them may be wrong by.

// rangeLeast is what remains of the best of readings (common practice, no source).
const rangeLeast = 0.03

// inService is the best estimate of gain, %/%, and reset time, s. The noise alone shows the gain,
// never the reset: NaN.
func (w *Watch) inService() (kc, ti float64, ok bool) {
	if kc, ti, ok = w.served(); !ok {
		kc, ok = w.gainAlone()
		ti = math.NaN()
	}
	return
}

// tuningRange gives the best estimate in service with its range, the gain in %/% of the loop
// list's range.
func (w *Watch) tuningRange() (k, k0, k1, t, t0, t1 float64) {
	n := math.NaN()
	k, k0, k1, t, t0, t1 = n, n, n, n, n, n
	kc, ti, ok := w.inService()
	if !ok {
		return
	}
	per := w.perList()
	k, t = math.Abs(kc)*per, ti
	if !(ti > 0 && ti < 1e6) {
		t = n
	}
	b, f := w.readBy(kc)
	if b == nil {
		return
	}
	low, high := w.readingErrors(b, f, ti)
	k0, k1, t0, t1 = k/low, k*high, t/low, t*high
	for j := range min(int(b.Count), fitRing) {
		f := &b.Ring[j]
		g := math.Abs(float64(f.Kc)) * per
		k0, k1 = min(k0, g), max(k1, g)
		if t == t && f.hasReset() {
			t0, t1 = min(t0, float64(f.Ti)), max(t1, float64(f.Ti))
		}
	}
	return
}

// readingErrors are the factors down and up by which gain and reset time, s, of a fit may
// differ from those in service. What of OP the law leaves open may move with e: by the
// inequality of Cauchy and Schwarz it then changes the gain by up to its rms over that of OP.
// Fewer readings than the ring holds have not shown how they stray. Kc + Ki/s behind a lag d
// shows as Kc - Ki d + Ki/s, the integral right and gain and reset both short by d/Ti: OP may
// be logged a sample late and PV be filtered, and a controller that takes e into its integral
// before it gives OP leads by half a sample.
func (w *Watch) readingErrors(b *fitBank, f *fit, ti float64) (down, up float64) {
	open := math.Sqrt(max(0, 1-float64(f.R2)))
	few := 0.0
	if b.Count < fitRing {
		few = changeGuess / float64(max(b.Count, 1))
	}
	each := math.Hypot(math.Hypot(rangeLeast, open), few)
	if !(ti > 0 && ti < noTi) { // how long a lag is to the reset is not known
		return 1 + each + leastLag, 1 + each + leastLag
	}
	late := w.s.Grid.DT
	if filter := w.loop.PVFilterS; filter > 0 && b.Lag == 0 {
		late += filter
	}
	return 1 + each + w.s.Grid.DT/(2*ti), 1 + each + late/ti
}

// leastLag is a sample over a usual reset time (common practice, no source).
const leastLag = 0.1
