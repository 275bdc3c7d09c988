package detect_test

import (
	"math"
	"sync"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// fixture is a record of one loop of Kestrel Fen that provokes one kind.
type fixture struct {
	kind   detect.Kind
	loop   *configs.Loop
	frames []collector.Frame
	onset  int64 // ms UTC, when the trouble began
	causes []detect.Cause
}

// fixtures has a record for every loop kind of the table; a test fails when a new
// row has none.
var fixtures = sync.OnceValue(func() []fixture {
	var out []fixture
	add := func(kind detect.Kind, name string, seed uint64, healthyS float64, fault func(*rig), faultS float64, causes ...detect.Cause) *fixture {
		g := newRig(plantB.stretched(6), 2.2, 60, seed)
		g.step, g.noise = 0.25, 0.1
		g.gain, g.reset = 2.2, 60
		g.bumps(5, 900)
		g.run(healthyS)
		onset := g.out[len(g.out)-1].Time
		fault(g)
		g.run(faultS)
		l := loopOf(name, g)
		l.Unit, l.GainPct, l.IdealReset = "mg/l", 2.2, 60
		out = append(out, fixture{kind, l, g.out, onset, causes})
		return &out[len(out)-1]
	}
	add(detect.GrowingOscillation, "AIC-204", 21, 10800, func(g *rig) {
		g.each = nil
		g.kc, g.ti, g.reset = 2.55073, 8.8, 8.8
		g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
	}, 2400, detect.ResetTooShort)
	add(detect.SustainedOscillation, "PIC-118", 22, 10800, func(g *rig) {
		g.each = func(t float64) { g.load = 8 * math.Sin(2*math.Pi*t/120) }
	}, 7200, detect.OutsideDisturbance, detect.Undetermined)
	add(detect.ValveStickingKind, "FIC-301", 23, 14400, func(g *rig) {
		g.each, g.stick, g.kc = nil, 8, 1.2
		g.kc = 2.2
		g.noise = 0.05
	}, 14400, detect.ValveSticking)
	add(detect.SustainedOffset, "FIC-112", 24, 14400, func(g *rig) {
		g.each, g.ti, g.load = nil, math.Inf(1), 12
	}, 14400, detect.IntegralMissing)
	add(detect.OutputSaturation, "LIC-310", 25, 10800, func(g *rig) {
		g.each, g.load = nil, -75
	}, 10800, detect.OutputLimit)
	add(detect.SluggishRecovery, "TIC-220", 26, 30000, func(g *rig) {
		g.ti, g.reset = 600, 600
		g.bumps(12, 4000)
	}, 40000, detect.ResetTooLong)
	add(detect.FrozenPV, "LIC-311", 27, 10800, func(g *rig) { g.frozen = true }, 14400, detect.MeasurementCause)
	add(detect.PVAtRangeEnd, "LIC-312", 28, 10800, func(g *rig) { g.peg = 0 }, 3600, detect.MeasurementCause)
	add(detect.NotInNormalMode, "AIC-205", 29, 7200, func(g *rig) { g.mode, g.byHand = collector.Manual, 51 }, 18000, detect.Undetermined)
	add(detect.TuningChanged, "PIC-119", 30, 7200, func(g *rig) { g.kc, g.gain = 1.8, 1.8 }, 600, detect.Undetermined)
	f := add(detect.StaleData, "FIC-302", 31, 7200, func(*rig) {}, 600, detect.MeasurementCause)
	for i := range f.frames {
		if x := &f.frames[i]; x.Time > f.onset {
			x.PV, x.SP, x.OP, x.Flags = collector.NaN32, collector.NaN32, collector.NaN32, collector.Gap
		}
	}
	return out
})
