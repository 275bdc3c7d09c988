package num

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Jain & Chlamtac 1985, worked example of the paper (the printed data have 0.5
// for 0.15, a misprint): the median and the markers after 20 observations.
func TestP2WorkedExample(t *testing.T) {
	m := P2{P: 0.5}
	for _, v := range []float64{0.02, 0.15, 0.74, 3.39, 0.83, 22.37, 10.15, 15.43, 38.62, 15.92, 34.60, 10.28, 1.47, 0.40, 0.05, 11.39, 0.27, 0.42, 0.09, 11.37} {
		m.Add(v)
	}
	want := [5]float64{0.02, 0.493895, 4.440634, 17.203904, 38.62}
	for i := range want {
		if math.Abs(m.Q[i]-want[i]) > 5e-7 {
			t.Errorf("marker %d = %.6f, want %.6f", i, m.Q[i], want[i])
		}
	}
	if m.Pos != [5]float64{1, 6, 10, 16, 20} {
		t.Errorf("positions %v", m.Pos)
	}
	if math.Abs(m.Value()-4.440634) > 5e-7 {
		t.Errorf("median %.6f", m.Value())
	}
}

// He et al. 2007: on a pure triangle the index is 1, on a pure sine 0.
func TestSineTrianglePureShapes(t *testing.T) {
	sine, tri := make([]float64, 64), make([]float64, 64)
	for i := range sine {
		u := (float64(i) + 0.5) / 64
		sine[i] = 3 * math.Sin(math.Pi*u)
		tri[i] = 2 * math.Min(u/0.3, (1-u)/0.7)
	}
	s, tr := SineTriangle(sine)
	if si := s / (s + tr); si > 1e-6 {
		t.Errorf("sine: index %g, want 0", si)
	}
	s, tr = SineTriangle(tri)
	if si := s / (s + tr); si < 1-1e-6 {
		t.Errorf("triangle: index %g, want 1", si)
	}
}

// The third harmonic of a square wave is 1/3 of its first, of a triangle 1/9
// (Fourier series).
func TestPhasorHarmonics(t *testing.T) {
	n := 1200
	sq, tri := make([]float64, n), make([]float64, n)
	for i := range sq {
		u := math.Mod((float64(i)+0.5)/300, 1)
		sq[i] = math.Copysign(1, 0.5-u)
		tri[i] = 1 - 4*math.Abs(u-0.5)
	}
	w := 2 * math.Pi / 300
	for _, c := range []struct {
		x    []float64
		want float64
	}{{sq, 1. / 3}, {tri, 1. / 9}} {
		r1, i1 := Phasor(c.x, w)
		r3, i3 := Phasor(c.x, 3*w)
		if got := math.Hypot(r3, i3) / math.Hypot(r1, i1); math.Abs(got-c.want) > 0.002 {
			t.Errorf("third harmonic %.4f, want %.4f", got, c.want)
		}
	}
}

func TestSlopeOfALine(t *testing.T) {
	b, se := Slope([]float64{1, 3, 5, 7, 9})
	if math.Abs(b-2) > 1e-12 || se > 1e-9 {
		t.Errorf("slope %g +- %g", b, se)
	}
}

func TestQuantileSettles(t *testing.T) {
	var q Quantile
	x := uint64(1)
	for range 20000 {
		x = x*6364136223846793005 + 1442695040888963407
		q.Add(float64(x>>11)/(1<<53), 0.75, 0.01, 1e-9)
	}
	if v := q.Value(); math.Abs(v-0.75) > 0.05 {
		t.Errorf("75 %% quantile of a uniform variable %.3f", v)
	}
}

// Exact data give back the coefficients, with the third regressor and without; a third
// that is made of the others is refused.
func TestSumsGiveBackTheCoefficients(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 5))
	var two, three, twin Sums
	for range 200 {
		a, b, c := r.NormFloat64(), 3*r.NormFloat64(), 0.2*r.NormFloat64()
		two.Add(a, b, c, 2*a-0.5*b)
		three.Add(a, b, c, 2*a-0.5*b+4*c)
		twin.Add(a, b, a-2*b, a+b)
	}
	if k0, k1, rss, ok := two.Two(); !ok || math.Abs(k0-2) > 1e-9 || math.Abs(k1+0.5) > 1e-9 || rss > 1e-9*two.YY {
		t.Errorf("two: %g %g, rss %g", k0, k1, rss)
	}
	if k0, k1, k2, rss, ok := three.Three(); !ok || math.Abs(k0-2) > 1e-4 || math.Abs(k1+0.5) > 1e-4 || math.Abs(k2-4) > 1e-4 || rss > 1e-5*three.YY {
		t.Errorf("three: %g %g %g, rss %g", k0, k1, k2, rss)
	}
	if _, _, _, _, ok := twin.Three(); ok {
		t.Error("a third regressor made of the others was taken")
	}
	var none Sums
	if _, _, _, ok := none.Two(); ok {
		t.Error("solved without data")
	}
}
