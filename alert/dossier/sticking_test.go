package dossier_test

import (
	"bufio"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"midwatch/alert/dossier"
	"midwatch/alert/dossier/process"
	"midwatch/collector"
	"midwatch/configs"
)

// Limit cycles of a sticking valve against the reference (tune/testdata, table T7):
// first our own plant with PI and valve, then what the dossier reads from samples of
// it: period, amplitudes, and the way of OP from turn to turn.
func TestStickingCyclesAgainstTheReference(t *testing.T) {
	plants := map[string]process.Model{"B": {Gain: 1, LagsS: []float64{10}, ThetaS: 2}, "H": {Gain: 0.05, ThetaS: 4, Integrating: true}}
	f, err := os.Open("tune/testdata/check-values.md")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	in, rows, seen := false, 0, 0
	for s := bufio.NewScanner(f); s.Scan(); {
		if strings.HasPrefix(s.Text(), "## ") {
			in = strings.HasPrefix(s.Text(), "## T7")
		}
		c := strings.Split(strings.Trim(s.Text(), "|"), "|")
		if len(c) < 10 || !in {
			continue
		}
		var v [10]float64
		for i := range c {
			if x, err := strconv.ParseFloat(strings.TrimSpace(c[i]), 64); err == nil {
				v[i] = x
			}
		}
		m, ok := plants[strings.TrimSpace(c[0])]
		if !ok || v[4] != 0.005 { // the finer step
			continue
		}
		rows++
		kc, ti, band, h, period, ampPV, ampOP := v[1], v[2], v[3], v[4], v[5], v[6], v[7]
		l := configs.NewLoop("FIC-207")
		l.Action, l.GainPct, l.IdealReset, l.Gain, l.Reset, l.ResetS, l.PVRangeGiven, l.SampleS, l.ScanS = configs.Reverse, kc, ti, kc, ti, ti, true, 0.5, 0.5
		l.Process = configs.SelfRegulating
		if m.Integrating {
			l.Process = configs.Integrating
		}
		p := process.NewPlant(m, h)
		pv, sum, stem := 0.0, 0.0, 0.0
		var fs []collector.Frame
		var crossings []float64 // s
		loPV, hiPV, loOP, hiOP := 1e9, -1e9, 1e9, -1e9
		n := int((40*period + 600) / h)
		for k := range n {
			sp := 0.0
			if float64(k)*h >= 1 {
				sp = 1
			}
			e := sp - pv
			sum += kc * e * h / ti
			op := kc*e + sum
			if math.Abs(op-stem) > band {
				stem = op
			}
			was := pv
			pv = p.Step(stem)
			if k > n/2 {
				if was < 1 && pv >= 1 {
					crossings = append(crossings, float64(k)*h)
				}
				loPV, hiPV, loOP, hiOP = math.Min(loPV, pv), math.Max(hiPV, pv), math.Min(loOP, op), math.Max(hiOP, op)
			}
			if k%int(0.5/h) == 0 {
				fs = append(fs, collector.Frame{Time: startMs + int64(float64(k)*h*1000), PV: float32(50 + pv), SP: float32(50 + sp), OP: float32(50 + op), Mode: collector.Auto,
					Position: collector.NaN32, Feedforward: collector.NaN32})
			}
		}
		name := strings.TrimSpace(c[0]) + ", gain " + c[1] + ", reset" + c[2]
		if a := (hiPV - loPV) / 2; math.Abs(a/ampPV-1) > 0.03 {
			t.Errorf("%s: PV amplitude %.3f, want %.3f", name, a, ampPV)
		}
		if a := (hiOP - loOP) / 2; math.Abs(a/ampOP-1) > 0.03 {
			t.Errorf("%s: OP amplitude %.3f, want %.3f", name, a, ampOP)
		}
		d, err := dossier.Build(dossier.Input{Loop: l, Frames: each(fs)})
		if err != nil {
			t.Fatal(err)
		}
		mean := (crossings[len(crossings)-1] - crossings[0]) / float64(len(crossings)-1)
		if math.Abs(mean/period-1) > 0.05 {
			t.Errorf("%s: period of the simulation %.1f s, want %.1f", name, mean, period)
		}
		if len(d.Cycles) == 0 {
			t.Logf("%s: the watch takes it for no cycle", name) // its judgement is tested with it
			continue
		}
		seen++
		x := d.Cycles[len(d.Cycles)-1]
		if math.Abs(x.Period.Value/period-1) > 0.06 {
			t.Errorf("%s: period %s, want %.1f s", name, x.Period, period)
		}
		// Of the first harmonic: a triangle has 0.81 of its peak, a square 1.27.
		if a := x.Amplitude.Value / ampPV; a < 0.75 || a > 1.3 {
			t.Errorf("%s: amplitude %s, the reference has a peak of %.3f", name, x.Amplitude, ampPV)
		}
		if a := x.OP.Value / ampOP; a < 0.75 || a > 1.3 {
			t.Errorf("%s: OP %s, the reference has a peak of %.3f", name, x.OP, ampOP)
		}
		if f, _ := find(d.Element, "stick_band_pct"); f.Number != nil && (f.Number.Value < band || f.Number.Value > 2.15*ampOP) {
			t.Errorf("%s: band %s; the true one is %.1f %%, OP goes %.2f %% from turn to turn", name, f.Number, band, 2*ampOP)
		} else {
			t.Logf("%s: period %s (%.1f), PV %s (%.3f), OP %s (%.3f), band %s%s", name, x.Period, period, x.Amplitude, ampPV, x.OP, ampOP, f.Number, f.Text)
		}
	}
	if rows != 5 || seen < 2 {
		t.Errorf("%d rows of T7, want 5; cycles seen in %d, want 2 or more", rows, seen)
	}
}
