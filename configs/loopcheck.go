package configs

// checkTuning refuses tuning that can be read in two ways.
func checkTuning(e *entry, c *problemList) {
	l := e.loop
	say := func(column, hint, format string, a ...any) {
		c.addLoop(e.place(column), column, l.Name, hint, format, a...)
	}
	if e.has("reset") && e.has("reset_s") {
		say("reset_s", "keep one: reset as the faceplate shows it, or reset_s in seconds", "both reset and reset_s are given")
	}
	if e.has("rate") && e.has("rate_s") {
		say("rate_s", "keep one: rate as the faceplate shows it, or rate_s in seconds", "both rate and rate_s are given")
	}
	integralGain := l.ResetUnit == ResetPerSecond || l.ResetUnit == ResetPerMinute
	hasReset := e.has("reset") && !l.PropOnly || e.has("reset_tag")
	switch {
	case integralGain && l.Form != Parallel:
		say("reset_unit", "write form parallel, or repeats/min, repeats/s, s or min", "%s is the integral gain of the parallel form", l.ResetUnit)
	case hasReset && !integralGain && l.Form == Parallel:
		say("reset_unit", "write the integral gain with reset_unit 1/s or 1/min; if the gain also acts on the integral part, the form is ideal",
			"the reset of the parallel form cannot be read in %s", l.ResetUnit)
	case e.has("reset") && !l.PropOnly && integralGain && !e.has("gain"):
		say("reset", "give the gain, too: reset time = gain / integral gain", "an integral gain without a gain")
	}
	if l.Form == Parallel && e.has("rate") && l.Rate > 0 && !e.has("gain") {
		say("rate", "give the gain, too: rate time = derivative gain / gain", "a derivative gain without a gain")
	}
}

// checkLoop checks the values of a loop against each other. All of them were
// read without a mistake.
func checkLoop(e *entry, c *problemList) {
	l := e.loop
	say := func(column, hint, format string, a ...any) {
		c.addLoop(e.place(column), column, l.Name, hint, format, a...)
	}
	pvOK, opOK := l.PVLow < l.PVHigh, l.OPLow < l.OPHigh
	if !pvOK {
		say("pv_low", "pv_low is the smaller end of the scale", "pv_low %s is not below pv_high %s", short(l.PVLow), short(l.PVHigh))
	}
	if !opOK {
		say("op_low", "op_low is the smaller end of the scale; the sense of the controller belongs in action",
			"op_low %s is not below op_high %s", short(l.OPLow), short(l.OPHigh))
	}
	inside := func(column string, x, low, high float64, scale string) {
		if x < low || x > high {
			say(column, "correct it, or the range", "%s is outside the %s range %s to %s", short(x), scale, short(low), short(high))
		}
	}
	if pvOK {
		inside("sp_limit_low", l.SPLimitLow, l.PVLow, l.PVHigh, "PV")
		inside("sp_limit_high", l.SPLimitHigh, l.PVLow, l.PVHigh, "PV")
		inside("pv_alarm_low", l.PVAlarmLow, l.PVLow, l.PVHigh, "PV")
		inside("pv_alarm_high", l.PVAlarmHigh, l.PVLow, l.PVHigh, "PV")
		if l.OffsetOK > l.PVSpan() {
			say("offset_ok", "write it in PV units", "%s is more than the whole PV range of %s", short(l.OffsetOK), short(l.PVSpan()))
		}
		if l.SPLimitLow >= l.SPLimitHigh {
			say("sp_limit_low", "the low limit is the smaller one", "sp_limit_low %s is not below sp_limit_high %s", short(l.SPLimitLow), short(l.SPLimitHigh))
		}
	}
	if opOK {
		inside("op_limit_low", l.OPLimitLow, l.OPLow, l.OPHigh, "OP")
		inside("op_limit_high", l.OPLimitHigh, l.OPLow, l.OPHigh, "OP")
		if l.OPLimitLow >= l.OPLimitHigh {
			say("op_limit_low", "the low limit is the smaller one", "op_limit_low %s is not below op_limit_high %s", short(l.OPLimitLow), short(l.OPLimitHigh))
		}
		if l.OPSplit <= l.OPLow || l.OPSplit >= l.OPHigh {
			say("op_split", "write the OP at which the second element takes over", "%s is not inside the OP range %s to %s", short(l.OPSplit), short(l.OPLow), short(l.OPHigh))
		}
	}
	if l.PVAlarmLow >= l.PVAlarmHigh {
		say("pv_alarm_low", "the low alarm is the smaller one", "pv_alarm_low %s is not below pv_alarm_high %s", short(l.PVAlarmLow), short(l.PVAlarmHigh))
	}
	if l.SilenceS <= l.SampleS {
		say("silence_s", "write several times sample_s", "silence_s %s is not longer than sample_s %s", short(l.SilenceS), short(l.SampleS))
	}
	if l.FeedforwardKind != "" && l.Feedforward == "" {
		say("feedforward_kind", "name the tag in feedforward", "there is no feed-forward signal")
	}
	if l.Was == l.Name && l.Was != "" {
		say("was", "write the name before the rename, or leave it empty", "the former name is the name itself")
	}
	if l.Inner == l.Name && l.Inner != "" {
		say("inner", "name the loop whose set point this output sets", "a loop cannot be its own inner loop")
	}
	checkModeTags(e, say)
	checkOwnTags(l, say)
}

func checkModeTags(e *entry, say func(column, hint, format string, a ...any)) {
	l := e.loop
	if l.ModeTag == "" {
		return
	}
	_, second := l.ModeTags()
	pairs, _ := checkModeMap(l.ModeMap)
	switch {
	case second != "" && !pairs:
		say("mode_map", "write pairs such as 0/0=manual;1/0=auto;1/1=cascade", "the mode is given by two tags, the map has no pairs")
	case second == "" && pairs:
		say("mode", `write both tags, joined by " & "`, "the mode map has pairs, the mode only one tag")
	}
}

// checkOwnTags refuses one tag in two of the three main roles of one loop.
// Between loops it is a cascade, a selector or a standby.
func checkOwnTags(l *Loop, say func(column, hint, format string, a ...any)) {
	type role struct{ column, tag string }
	roles := []role{{"pv", l.PV}, {"sp", l.SP}, {"op", l.OP}}
	for i, a := range roles {
		for _, b := range roles[i+1:] {
			s1, t1 := SplitTag(a.tag, l.Source)
			s2, t2 := SplitTag(b.tag, l.Source)
			if a.tag != "" && b.tag != "" && s1 == s2 && t1 == t2 {
				say(b.column, "give each its own tag", "%s and %s are the same tag %s", a.column, b.column, t1)
			}
		}
	}
}

// maxCascade bounds the search for circles of inner loops; real cascades have two
// or three loops.
const maxCascade = 64

// checkLoopNames checks the names of all loops against each other.
func checkLoopNames(entries []*entry, c *problemList) {
	byName := map[string]*entry{}
	names := make([]string, 0, len(entries))
	for _, e := range entries {
		if e.loop.Name == "" {
			continue
		}
		if first, dup := byName[e.loop.Name]; dup {
			c.add(e.place("loop"), "loop", "rename one of the two", "the name %s is already used in %s", e.loop.Name, first.place("loop"))
			continue
		}
		byName[e.loop.Name] = e
		names = append(names, e.loop.Name)
	}
	was := map[string]*entry{}
	for _, e := range entries {
		l := e.loop
		if l.Was != "" && l.Was != l.Name {
			if other, there := byName[l.Was]; there {
				c.addLoop(e.place("was"), "was", l.Name, "remove that loop, or clear was", "a loop of the former name %s still exists (%s)", l.Was, other.place("loop"))
			}
			if other, dup := was[l.Was]; dup {
				c.addLoop(e.place("was"), "was", l.Name, "only one loop can continue another", "%s has the same former name %s", other.loop.Name, l.Was)
			}
			was[l.Was] = e
		}
		if l.Inner != "" && byName[l.Inner] == nil {
			hint := "write the name of a loop of the list"
			if n, meant := nearest(l.Inner, names); meant {
				hint = "did you mean " + n + "?"
			}
			c.addLoop(e.place("inner"), "inner", l.Name, hint, "there is no loop %s", l.Inner)
		}
	}
	for _, e := range entries {
		at := e
		for range maxCascade {
			if at = byName[at.loop.Inner]; at == nil || at == e {
				break
			}
		}
		if at == e && e.loop.Inner != e.loop.Name {
			c.addLoop(e.place("inner"), "inner", e.loop.Name, "the inner loop of the last one stays empty", "the inner loops go round in a circle")
		}
	}
}
