package configs

// Change says what a difference between two states of a loop asks for at a
// reload, from least to most.
type Change uint8

const (
	ChangeNone    Change = iota // nothing differs
	ChangeText                  // names, texts, routing, priority: nothing restarts
	ChangeVerdict               // tuning, form, normal mode, duty, limits: judged anew, memory kept
	ChangeMemory                // range, action, process, sampling, tags: new memory, window kept, a mark in it
)

// String is the change in a word.
func (c Change) String() string {
	return wordOrEmpty(int(c), []string{"none", "text", "verdict", "memory"})
}

// Difference says what a reload from old to new asks for. Places in files do not
// count, nor do two ways to write the same tuning (2 repeats/min and 30 s),
// unless gain_tag or reset_tag are read in those units.
func Difference(old, new *Loop) Change {
	ch := ChangeNone
	for _, c := range columns {
		if c.change > ch && c.get(old) != c.get(new) {
			ch = c.change
		}
	}
	if ch < ChangeVerdict && !sameTuning(old, new) {
		ch = ChangeVerdict
	}
	return ch
}

// SameIdentity says whether the memory of old serves new.
func SameIdentity(old, new *Loop) bool { return Difference(old, new) < ChangeMemory }

// SameVerdict says whether all that findings depend on is the same.
func SameVerdict(old, new *Loop) bool { return Difference(old, new) < ChangeVerdict }

func sameTuning(a, b *Loop) bool {
	if a.PropOnly != b.PropOnly || a.PVRangeGiven != b.PVRangeGiven {
		return false
	}
	if a.GainTag != "" && a.GainUnit != b.GainUnit || a.ResetTag != "" && a.ResetUnit != b.ResetUnit {
		return false
	}
	same := func(x, y float64) bool { return x == y || x != x && y != y }
	return same(a.GainPct, b.GainPct) && same(a.IdealReset, b.IdealReset) && same(a.RateS, b.RateS)
}
