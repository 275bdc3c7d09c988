package dossier

import (
	"fmt"
	"math"
	"slices"

	"midwatch/detect"
)

// Kept is a reading of the tuning in service that a running watch wrote down:
// gain in %/%, reset time in s, each with the range the data allowed; NaN is not
// known. Time is ms UTC.
type Kept struct {
	Time                int64
	Gain                float64
	GainLow, GainHigh   float64
	ResetS              float64
	ResetLow, ResetHigh float64
	Read                bool // read from tags; else fitted to the data
}

// keptReadings are the kept readings up to a time, oldest first, without those
// that only say again, a day later, what the one before said.
func keptReadings(ks []Kept, to int64) []Reading {
	var out []Reading
	var last Kept
	same := func(a, b float64) bool { return a == b || a != a && b != b }
	for _, k := range ks {
		if k.Time > to || !(k.Gain > 0) && !(k.ResetS > 0) || len(out) > 0 && k.Read == last.Read && same(k.Gain, last.Gain) && same(k.ResetS, last.ResetS) {
			continue
		}
		last = k
		r := Reading{at: k.Time, At: detect.FormatTime(k.Time), Gain: none("not read"), Reset: none("no integral action seen"), AtOP: none("not kept"), Tags: k.Read, atPV: math.NaN()}
		if k.Gain > 0 {
			r.Gain = ranged(k.Gain, k.GainLow, k.GainHigh, "%/%")
		}
		if k.ResetS > 0 {
			r.Reset = ranged(k.ResetS, k.ResetLow, k.ResetHigh, "s")
		}
		out = append(out, r)
	}
	slices.SortStableFunc(out, func(a, b Reading) int { return int(max(-1, min(1, a.at-b.at))) })
	return out
}

// newestKept is the newest reading of the gain that was fitted to data; false
// where none is kept.
func newestKept(rs []Reading) (Reading, bool) {
	for _, r := range slices.Backward(rs) {
		if !r.Tags && r.Gain.Known() {
			return r, true
		}
	}
	return Reading{}, false
}

// keptFacts sums up what the watch kept: how much, and the changes of it that
// told does not speak of already.
func (s *series) keptFacts(in *Input, rs []Reading, told []tuningChange) []Fact {
	if len(rs) == 0 {
		return nil
	}
	day := func(r Reading) string { return in.at(r.at).Format("2 Jan 2006") }
	text := fmt.Sprintf("%d readings that differ, %s to %s", len(rs), day(rs[0]), day(rs[len(rs)-1]))
	if len(rs) == 1 {
		text = "one reading, " + day(rs[0])
	}
	out := []Fact{say("kept", "kept by the running watch", text)}
	var fitted []Reading
	for _, r := range rs {
		if !r.Tags {
			fitted = append(fitted, r)
		}
	}
	for _, c := range changesRead(fitted) {
		if slices.ContainsFunc(told, func(t tuningChange) bool { return t.at > c.between[0]-6*3600e3 && t.at < c.between[1]+6*3600e3 }) {
			continue
		}
		out = append(out, say("kept_change", "change, kept readings", fmt.Sprintf("from about %s to about %s, between %s and %s", faceplate(in.Loop, about(c.k0), about(c.t0)),
			faceplate(in.Loop, about(c.k1), about(c.t1)), in.at(c.between[0]).Format("2 Jan 2006 15:04"), in.at(c.between[1]).Format("2 Jan 2006 15:04"))))
	}
	return out
}
