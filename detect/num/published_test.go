package num

import (
	"math"
	"math/rand/v2"
	"testing"
)

// The five numbers (2, 4, 5, 4, 5) worked by hand: slope 0.6, residual sum of
// squares 2.4, so a standard error of sqrt(2.4/3/10).
func TestSlopeByHand(t *testing.T) {
	b, se := Slope([]float64{2, 4, 5, 4, 5})
	if math.Abs(b-0.6) > 1e-12 || math.Abs(se-math.Sqrt(0.08)) > 1e-12 {
		t.Errorf("slope %g +- %g, want 0.6 +- %g", b, se, math.Sqrt(0.08))
	}
	if _, se := Slope([]float64{1, 2}); !math.IsInf(se, 1) {
		t.Errorf("two points give a standard error of %g", se)
	}
}

// The slope of white noise over its standard error has Student's distribution: of
// ten points, 8 degrees of freedom, 5 % lie beyond 2.306 (Student 1908).
func TestSlopeOfNoiseFollowsStudent(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	beyond := 0
	const n = 20000
	for range n {
		var y [10]float64
		for i := range y {
			y[i] = r.NormFloat64()
		}
		if b, se := Slope(y[:]); math.Abs(b/se) > 2.306 {
			beyond++
		}
	}
	if p := float64(beyond) / n; math.Abs(p-0.05) > 0.006 {
		t.Errorf("%.4f beyond 2.306, want 0.05", p)
	}
}

// The sine-triangle errors scale with the square of the amplitude, so that the
// index of He et al. (2007) does not know it; a skewed triangle is a triangle
// still (its peak is free), a square wave neither.
func TestShapeKnowsNoAmplitude(t *testing.T) {
	index := func(a float64, f func(u float64) float64) float64 {
		x := make([]float64, 40)
		for i := range x {
			x[i] = a * f((float64(i)+0.5)/40)
		}
		s, tr := SineTriangle(x)
		return s / (s + tr)
	}
	skew := func(p float64) func(float64) float64 {
		return func(u float64) float64 { return math.Min(u/p, (1-u)/(1-p)) }
	}
	for _, a := range []float64{1e-3, 1, 500} {
		for _, p := range []float64{0.1, 0.25, 0.5, 0.8, 0.9} {
			if si := index(a, skew(p)); si < 0.999 {
				t.Errorf("triangle with its peak at %g, amplitude %g: %g", p, a, si)
			}
		}
		if si := index(a, func(u float64) float64 { return math.Sin(math.Pi * u) }); si > 1e-6 {
			t.Errorf("sine, amplitude %g: %g", a, si)
		}
		// Half a sine with a third of third harmonic taken away is between the two.
		mixed := index(a, func(u float64) float64 { return math.Sin(math.Pi*u) - math.Sin(3*math.Pi*u)/18 })
		if mixed < 0.1 || mixed > 0.9 {
			t.Errorf("halfway shape, amplitude %g: %g", a, mixed)
		}
	}
	if s, tr := SineTriangle([]float64{1, 2, 1, 0}); s != 0 || tr != 0 {
		t.Errorf("four samples give %g and %g", s, tr)
	}
}

// A phasor reads amplitude and phase of one harmonic and is blind to the others.
func TestPhasorReadsAmplitudeAndPhase(t *testing.T) {
	const n = 240
	x := make([]float64, n)
	w := 2 * math.Pi / 40
	for i := range x {
		x[i] = 2.5*math.Cos(w*float64(i)+0.7) + 9 + 4*math.Sin(3*w*float64(i))
	}
	re, im := Phasor(x, w)
	if math.Abs(math.Hypot(re, im)-2.5) > 1e-9 || math.Abs(math.Atan2(im, re)-0.7) > 1e-9 {
		t.Errorf("amplitude %g, phase %g", math.Hypot(re, im), math.Atan2(im, re))
	}
}

// P2 against the exact quantiles of distributions with a closed form.
func TestP2OfKnownDistributions(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 4))
	for _, c := range []struct {
		name string
		draw func() float64
		at   func(p float64) float64
	}{
		{"uniform", r.Float64, func(p float64) float64 { return p }},
		{"exponential", r.ExpFloat64, func(p float64) float64 { return -math.Log(1 - p) }},
		{"normal", r.NormFloat64, func(p float64) float64 { return math.Sqrt2 * math.Erfinv(2*p-1) }},
	} {
		for _, p := range []float64{0.25, 0.5, 0.75, 0.95} {
			m := P2{P: p}
			for range 50000 {
				m.Add(c.draw())
			}
			if got, want := m.Value(), c.at(p); math.Abs(got-want) > 0.03*(1+math.Abs(want)) {
				t.Errorf("%s, %g: %.4f, want %.4f", c.name, p, got, want)
			}
		}
	}
	m := P2{P: 0.5}
	if v := m.Value(); v == v {
		t.Errorf("no observation gives %g", v)
	}
	for _, v := range []float64{3, 1, 2} {
		m.Add(v)
	}
	if m.Value() != 2 {
		t.Errorf("median of 3, 1, 2 is %g", m.Value())
	}
}

// Rousseeuw & Croux (1993, JASA 88): 1.4826 times the median deviation is the
// standard deviation of normal values; 1.482602 = 1/quantile(3/4).
func TestMedianDeviation(t *testing.T) {
	if k := 1 / (math.Sqrt2 * math.Erfinv(0.5)); math.Abs(k-1.482602) > 5e-7 {
		t.Fatalf("factor %.7f", k)
	}
	r := rand.New(rand.NewPCG(6, 6))
	var sum float64
	const n = 4000
	for range n {
		var x [63]float64
		for i := range x {
			x[i] = 5 + 0.3*r.NormFloat64()
		}
		m := Median(x[:])
		for i := range x {
			x[i] = math.Abs(x[i] - m)
		}
		sum += 1.482602 * Median(x[:])
	}
	if s := sum / n; math.Abs(s/0.3-1) > 0.03 {
		t.Errorf("standard deviation %.4f, want 0.3", s)
	}
	// The follower of a quantile sees the same median of |normal|.
	var q Quantile
	for range 60000 {
		q.Add(math.Abs(0.3*r.NormFloat64()), 0.5, 0.005, 1e-6)
	}
	if s := 1.482602 * q.Value(); math.Abs(s/0.3-1) > 0.05 {
		t.Errorf("followed %.4f, want 0.3", s)
	}
}

// A follower forgets: after a change it settles at the new value, which markers
// over all observations do not.
func TestQuantileForgets(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	var q Quantile
	for range 20000 {
		q.Add(r.Float64(), 0.5, 0.02, 1e-9)
	}
	for range 2000 {
		q.Add(10*r.Float64(), 0.5, 0.02, 1e-9)
	}
	if v := q.Value(); math.Abs(v-5) > 0.8 {
		t.Errorf("median %.3f after the change, want 5", v)
	}
	for range 100 { // zeros count as least and do not sink it for good
		q.Add(0, 0.5, 0.02, 1)
	}
	if v := q.Value(); v < 1 || v != v {
		t.Errorf("%.3f after zeros that count as 1", v)
	}
}

func TestMedian(t *testing.T) {
	x := []float64{5, 1, 4, 2}
	if m := Median(x); m != 3 || x[0] != 5 {
		t.Errorf("median %g, input now %v", m, x)
	}
	if m := Median(nil); m == m {
		t.Errorf("median of nothing %g", m)
	}
}
