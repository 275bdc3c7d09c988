package detect

import (
	"testing"

	"midwatch/collector"
)

// The usual tuning of a run is kept over slots, and is in every slot what reckoning it
// anew would give: over new runs, closed blocks of the fits, a change of the tuning, a
// new pace of the data, and from a memory.
func TestUsualTuningIsNeverOld(t *testing.T) {
	w := New(calmLoop(), 0, Options{})
	var between []byte // memory of a loop between two runs
	pv, integ, sp, ms := 50.0, 50.0, 50.0, int64(0)
	seen := map[[2]float64]bool{}
	for i := range 60000 {
		if i%900 == 0 {
			sp = 100 - sp + 4*float64(i/900%2) // 48 and 52 in turn, a little off
		}
		kc := 0.8
		if i > 30000 {
			kc = 0.4
		}
		e := sp - pv
		integ += kc * e / 30
		op := kc*e + integ
		pv += (op - pv) / 30
		ms += 1000
		if i > 50000 {
			ms += 9000 // another pace
		}
		w.Step(&collector.Frame{Time: ms, PV: float32(pv), SP: float32(sp), OP: float32(op), Mode: collector.Auto,
			Feedforward: collector.NaN32, Position: collector.NaN32}, func(*Finding) {})
		kc, ti, ok := w.usualOfRun()
		if k, r, now := w.usualTuning(w.s.Off.T0); k != kc || r != ti || now != ok {
			t.Fatalf("slot %d: kept %v %v %v, is %v %v %v", i, kc, ti, ok, k, r, now)
		}
		seen[[2]float64{kc, ti}] = true
		if between == nil && ok && w.s.Off.T0 == 0 {
			between = w.Save(nil)
		}
	}
	if len(seen) < 10 {
		t.Errorf("only %d tunings came up", len(seen))
	}
	v := New(calmLoop(), 0, Options{})
	v.usualOfRun()
	if err := v.Load(between); err != nil {
		t.Fatal(err)
	}
	if _, _, ok := v.usualOfRun(); !ok {
		t.Error("a memory does not bring its usual tuning")
	}
}
