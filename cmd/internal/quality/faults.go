package quality

import (
	"math/rand/v2"

	"midwatch/detect"
)

type kinds = []detect.Kind

type causes = []detect.Cause

var saturating = kinds{detect.OutputSaturation, detect.TuningChanged}

// retry draws until the family's own conditions hold.
func retry(f func() *scenario) *scenario {
	for {
		if s := f(); s != nil {
			return s
		}
	}
}

// single is a scenario of one loop.
func single(l *rig, baseline, fault float64, t truth) *scenario {
	t.onset = baseline
	return &scenario{rigs: []*rig{l}, duration: baseline + fault, truth: t}
}

var faultFamilies = []family{
	{name: "growing by reset", what: "reset too short: grows 4 to 40 % a cycle", draw: growing(anyShape, true, false)},
	{name: "growing by gain", what: "gain too high: grows 4 to 40 % a cycle", draw: growing(anyShape, false, false)},
	{name: "growing from the start", what: "as both, no baseline", draw: func(r *rand.Rand, d float64) *scenario {
		return growing(anyShape, chance(r, 0.5), true)(r, d)
	}},
	{name: "growing runaway", what: "mildly runaway process, reset too short", draw: runawaySwing},
	{name: "edge by reset", what: "at the border of stability, reset", draw: edge(true)},
	{name: "edge by gain", what: "at the border of stability, gain", draw: edge(false)},
	{name: "cycling on a titration curve", what: "gain too high on an S-shaped measurement", draw: nonlinearSwing},
	{name: "cascade, outer growing", what: "outer reset too short", draw: cascadeGrowing},
	{name: "cascade, inner sticking", what: "valve of the inner loop sticks", draw: cascadeSticking},
	{name: "standing swing", what: "sticking or outside sine from the start", draw: func(r *rand.Rand, d float64) *scenario {
		return standing(pick(r, sticking(selfRegulating, false), outside(false), edge(false)))(r, d)
	}},
	{name: "standing offset", what: "integral off from the start", draw: standing(offset(false))},
	{name: "sticking, self-regulating", what: "valve sticks 1.5 to 8 %", draw: sticking(selfRegulating, false)},
	{name: "sticking, integrating", what: "valve sticks 1.5 to 8 %", draw: sticking([]shape{level, levelWithLag}, false)},
	{name: "dead band, integrating", what: "dead band 1.5 to 8 %", draw: sticking([]shape{level, levelWithLag}, true)},
	{name: "outside sine", what: "sine from outside, 1.5 to 20 ultimate periods", draw: outside(false)},
	{name: "outside square", what: "square wave from outside", draw: outside(true)},
	{name: "shared, outside", what: "3 to 6 loops, one outside sine", draw: shared(false)},
	{name: "shared, sticking root", what: "3 to 6 loops driven by one sticking valve", draw: shared(true)},
	{name: "sluggish by reset", what: "reset 4 to 10 times too long", draw: sluggish(true, false)},
	{name: "sluggish by gain", what: "gain 4 to 10 times too low", draw: sluggish(false, false)},
	{name: "sluggish from the start", what: "as both, no baseline", draw: func(r *rand.Rand, d float64) *scenario {
		return sluggish(chance(r, 0.5), true)(r, d)
	}},
	{name: "slow swing, integrating", what: "k*Kc*Ti 0.08 to 0.3", draw: slowSwing},
	{name: "offset, integral off", what: "reset switched off, load changed", draw: offset(false)},
	{name: "offset, integral gap", what: "integral rests inside a gap", draw: offset(true)},
	{name: "element stuck", what: "final element does not move", draw: elementStuck},
	{name: "saturation", what: "load beyond capacity", draw: saturation},
	{name: "wind-up", what: "no anti-windup, overloads that come and go", draw: windUp},
	{name: "frozen PV", what: "measurement stands still", draw: frozen},
	{name: "PV at range end", what: "measurement sits at 0 or full range", draw: pegged},
	{name: "stale, silence", what: "nothing arrives for hours", draw: stale(false)},
	{name: "stale, bad quality", what: "PV bad for hours", draw: stale(true)},
	{name: "manual, mode known", what: "left in manual, with a mode column", draw: leftInManual(true)},
	{name: "manual, inferred", what: "left in manual, no mode column", draw: leftInManual(false)},
	{name: "gain changed", what: "gain times or over 1.6 to 5, still sound", draw: retuned(false)},
	{name: "reset changed", what: "reset times or over 1.6 to 5, still sound", draw: retuned(true)},
}
