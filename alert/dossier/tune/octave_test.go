package tune_test

import (
	"bufio"
	"os"
	"strings"
	"testing"

	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
)

// Margins of PI and PID loops against Octave's control package
// (testdata/margins.m, dead time as a Pade form of order 10).
func TestMarginsAgainstOctave(t *testing.T) {
	f, err := os.Open("testdata/octave.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	n := 0
	for s := bufio.NewScanner(f); s.Scan(); {
		c := strings.Split(s.Text(), ",")
		if c[0] == "name" {
			continue
		}
		m := process.Model{Gain: num(t, c[1]), ThetaS: num(t, c[3]), Integrating: c[4] == "1"}
		for _, l := range strings.Fields(c[2]) {
			m.LagsS = append(m.LagsS, num(t, l))
		}
		g := tune.Limits(m, tune.Tuning{Kc: num(t, c[5]), TiS: num(t, c[6]), TdS: num(t, c[7])})
		near(t, c[0]+" GM", g.GM, num(t, c[8]), 1e-3)
		near(t, c[0]+" PM", g.PMDeg, num(t, c[9]), 1e-3)
		near(t, c[0]+" Ms", g.Ms, num(t, c[10]), 1e-3)
		n++
	}
	if n != 7 {
		t.Errorf("%d rows", n)
	}
}
