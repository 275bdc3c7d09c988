package plant

import "time"

// DemoDay is the recorded part of the demo.
const DemoDay = 24 * time.Hour

// DemoFaults is the script of the demo: two faults that are old when the watch
// begins, and the four that every loop engineer knows, which begin with the live
// part at DemoDay: a growing oscillation (AIC-204), a sustained offset (FIC-118),
// a sluggish recovery (TIC-221) and an output saturation (FIC-341). Each can be
// decided within 90 minutes of plant time.
func DemoFaults() []Fault {
	return []Fault{
		{Loop: "FIC-207", At: 3 * time.Hour, Kind: StickingValve, Factor: 5},
		{Loop: "FIC-140", At: 9 * time.Hour, Kind: ManualSpell},
		{Loop: "TIC-221", At: DemoDay - 2*time.Minute, Kind: ResetTooLong, Factor: 5},
		{Loop: "AIC-204", At: DemoDay + time.Minute, Kind: ResetTooShort, Factor: 0.18},
		{Loop: "FIC-118", At: DemoDay + 2*time.Minute, Kind: IntegralOff, Factor: 18},
		{Loop: "FIC-341", At: DemoDay + 3*time.Minute, Kind: OutputLimited, Factor: 62},
	}
}

// Demo makes the works with the script of the demo; the recorded day begins at
// start, the live part DemoDay later.
func Demo(seed uint64, start time.Time) *Plant {
	p := NewAt(seed, start)
	if err := p.Add(DemoFaults()...); err != nil {
		panic(err) // the script names its own loops: a mistake in this file
	}
	return p
}
