package detect_test

import (
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/detect/num"
)

// octaveTable reads a file of testdata/octave, written by reading.m there.
func octaveTable(t *testing.T, name string) [][]string {
	t.Helper()
	f, err := os.Open("testdata/octave/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil || len(rows) < 2 {
		t.Fatalf("%s: %d rows, %v", name, len(rows), err)
	}
	return rows[1:]
}

func octaveNumber(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// The readings of a recorded loop against those of Octave (testdata/octave/reading.m:
// least squares by its own solver, the period by Welch 1967, the shape of He et al. 2007,
// the lag of a PI law in closed form): the sums of the regression to the last digits, the
// watch, which has other filters and never the whole record, within what noise leaves.
func TestReadingsAgainstOctave(t *testing.T) {
	want := map[string]float64{}
	for _, r := range octaveTable(t, "octave.csv") {
		want[r[0]] = octaveNumber(t, r[1])
	}
	near := func(what string, got, want, tolerance float64) {
		t.Helper()
		if !(math.Abs(got-want) <= tolerance) {
			t.Errorf("%s: %.6g, Octave %.6g", what, got, want)
		}
	}
	var frames []collector.Frame
	for _, r := range octaveTable(t, "loop.csv") {
		n := func(k int) float32 { return float32(octaveNumber(t, r[k])) }
		frames = append(frames, collector.Frame{Time: 1767225600000 + int64(octaveNumber(t, r[0])*1000), PV: n(1), SP: n(2), OP: n(3), Mode: collector.Auto})
	}

	const dt, until, over = 5.0, 14400 / 5, 12
	var sums num.Sums
	integral, err := make([]float64, until), make([]float64, until)
	for i := range until {
		err[i] = float64(frames[i].SP - frames[i].PV)
		if i > 0 {
			integral[i] = integral[i-1] + (err[i-1]+err[i])/2*dt
		}
	}
	rate := func(i int) float64 {
		if i == 0 {
			return 0
		}
		return float64(frames[i].OP-frames[i-1].OP) / dt
	}
	for i := over; i < until; i++ {
		sums.Add(err[i]-err[i-over], integral[i]-integral[i-over], rate(i-over)-rate(i), float64(frames[i].OP-frames[i-over].OP))
	}
	rel := func(what string, got float64, name string, part float64) {
		t.Helper()
		near(what, got, want[name], part*math.Abs(want[name]))
	}
	kc, ki, rss, ok := sums.Two()
	rel("gain", kc, "kc", 1e-5)
	rel("integral", ki, "ki", 1e-5)
	rel("residual", rss, "rss", 1e-3) // PV and OP are single precision here
	k3, i3, lag, rss3, ok3 := sums.Three()
	rel("gain beside a lag", k3, "kc_with_lag", 1e-4)
	rel("integral beside a lag", i3, "ki_with_lag", 1e-4)
	rel("lag", lag, "lag_s", 1e-2)
	rel("residual beside a lag", rss3, "rss_with_lag", 1e-3)
	if !ok || !ok3 {
		t.Error("not solved")
	}

	l := configs.NewLoop("AIC-204")
	l.PVRangeGiven, l.Action, l.Process, l.SampleS = true, configs.Reverse, configs.SelfRegulating, dt
	w := detect.New(l, 0, detect.Options{})
	var said []detect.Finding
	for i := range frames {
		if w.Step(&frames[i], func(f *detect.Finding) { said = append(said, *f) }); i == until {
			v := w.View()
			rel("gain in service", v.GainPct, "kc", 0.03)
			near("reset in service, s", v.ResetS, want["kc"]/want["ki"], 0.05*want["kc"]/want["ki"])
			if len(said) > 0 {
				t.Errorf("said of a loop at rest: %s", said[0].Text)
			}
		}
	}
	f, found := last(said, detect.ValveStickingKind)
	if !found {
		t.Fatal("the sticking cycle is not found")
	}
	get := func(name string) float64 { v, _ := f.Measures.Get(name); return v }
	rel("period, s", get("period_s"), "period_s", 0.03)
	near("shape of OP", get("shape_index"), want["index_op"], 0.06)
	near("lag, degrees", get("pi_lag_deg"), want["lag_deg"], 3)
	t.Logf("gain %.4g, reset %.4g s; period %.4g s (Octave %.4g), shape of OP %.3f (%.3f), lag %.1f (%.1f) degrees",
		w.View().GainPct, w.View().ResetS, get("period_s"), want["period_s"], get("shape_index"), want["index_op"], get("pi_lag_deg"), want["lag_deg"])
}
