package process_test

import (
	"bufio"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"midwatch/alert/dossier/process"
)

// octave reads testdata/octave.csv, made by testdata/responses.m with Octave's
// control package.
func octave(t *testing.T) map[string][]float64 {
	f, err := os.Open("testdata/octave.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	out := map[string][]float64{}
	s := bufio.NewScanner(f)
	for s.Scan() {
		c := strings.Split(s.Text(), ",")
		if len(c) != 3 || c[0] == "what" {
			continue
		}
		v, err := strconv.ParseFloat(c[2], 64)
		if err != nil {
			t.Fatal(err)
		}
		out[c[0]] = append(out[c[0]], v)
	}
	return out
}

var models = map[string]struct {
	m         process.Model
	tolerance float64 // of the answer sample by sample, share of its largest value
}{
	"first":           {process.Model{Gain: 1.5, LagsS: []float64{7}, ThetaS: 3.3}, 1e-9},
	"second":          {process.Model{Gain: 0.8, LagsS: []float64{9, 4}, ThetaS: 1.275}, 0.01},
	"third":           {process.Model{Gain: 1, LagsS: []float64{5, 3, 1}}, 0.03},
	"integrating":     {process.Model{Gain: 0.05, ThetaS: 2.6, Integrating: true}, 1e-9},
	"integrating-lag": {process.Model{Gain: 0.04, LagsS: []float64{6}, ThetaS: 1.1, Integrating: true}, 0.01},
}

func worst(a, b []float64) float64 {
	d, most := 0.0, 0.0
	for k := range a {
		d, most = math.Max(d, math.Abs(a[k]-b[k])), math.Max(most, math.Abs(b[k]))
	}
	return d / most
}

func TestResponsesAgainstOctave(t *testing.T) {
	ref := octave(t)
	u := ref["input"]
	for name, c := range models {
		want := ref[name]
		if len(want) != len(u) || len(u) < 50 {
			t.Fatalf("%s: %d of %d samples", name, len(want), len(u))
		}
		y := make([]float64, len(u))
		unit := c.m
		unit.Respond(y, u, 1)
		for k := range y {
			y[k] *= c.m.Gain
		}
		if d := worst(y, want); d > c.tolerance {
			t.Errorf("%s: off by %.2g of the largest value", name, d)
		}
		// The plant, in small steps.
		const fine = 40
		p := process.NewPlant(c.m, 1.0/fine)
		got := []float64{0}
		for _, v := range u {
			x := 0.0
			for range fine {
				x = p.Step(v)
			}
			got = append(got, x)
		}
		if d := worst(got[:len(u)], want); d > 2e-3 {
			t.Errorf("%s: the plant is off by %.2g of the largest value", name, d)
		}
	}
}

// A dead time between samples is kept: the answer to a step is that of the
// continuous process.
func TestDeadTimeBetweenSamples(t *testing.T) {
	u := make([]float64, 40)
	for k := 5; k < len(u); k++ {
		u[k] = 1
	}
	y := make([]float64, len(u))
	for _, th := range []float64{0, 0.3, 1, 1.7, 6.25} {
		m := process.Model{Gain: 1, LagsS: []float64{4}, ThetaS: th}
		m.Respond(y, u, 1)
		for k := range y {
			want := 0.0
			if d := float64(k) - 5 - th; d > 0 {
				want = 1 - math.Exp(-d/4)
			}
			if math.Abs(y[k]-want) > 1e-12 {
				t.Fatalf("dead time %g, sample %d: %g, want %g", th, k, y[k], want)
			}
		}
	}
}

// At the transfer function and by magnitude and phase a model is the same.
func TestFrequencyResponse(t *testing.T) {
	for name, c := range models {
		for _, w := range []float64{0.01, 0.1, 0.5} {
			g := c.m.At(complex(0, w))
			mag, ph := c.m.Magnitude(w), c.m.Phase(w)
			if math.Abs(real(g)-mag*math.Cos(ph)) > 1e-9*mag || math.Abs(imag(g)-mag*math.Sin(ph)) > 1e-9*mag {
				t.Errorf("%s at %g rad/s: %v, %g at %g", name, w, g, mag, ph)
			}
		}
	}
}

func TestReduce(t *testing.T) {
	// The half rule's own examples (Skogestad 2003): of 1/((s+1)(0.2s+1)), and of
	// an integrating process with lags, whose largest goes to the dead time by half.
	cases := []struct {
		m, want process.Model
	}{
		{process.Model{Gain: 1, LagsS: []float64{0.2, 1}}, process.Model{Gain: 1, LagsS: []float64{1.1}, ThetaS: 0.1}},
		{process.Model{Gain: 2, LagsS: []float64{8, 2, 1}, ThetaS: 3}, process.Model{Gain: 2, LagsS: []float64{9}, ThetaS: 5}},
		{process.Model{Gain: 0.1, LagsS: []float64{4, 1}, ThetaS: 1, Integrating: true}, process.Model{Gain: 0.1, ThetaS: 4, Integrating: true}},
	}
	for _, c := range cases {
		r := c.m.Reduce()
		if r.String() != c.want.String() {
			t.Errorf("%s becomes %s, want %s", c.m, r, c.want)
		}
	}
}
