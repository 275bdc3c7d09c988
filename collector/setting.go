package collector

import (
	"fmt"
	"math"
	"strings"

	"midwatch/configs"
)

// setting is what the assembler needs to know of a loop; it does not change.
type setting struct {
	loop       *configs.Loop
	sampleMs   int64 // as configured; 0: learnt (periodic) or one second (exception)
	silenceMs  int64 // without a sign of life until a gap
	ownSilence bool  // silence_s was given: a silent PV is a gap though its group lives
	exception  bool
	aliveTag   bool
	modes      *ModeMap
	active     condition
	suppress   condition
}

// newSetting shares the mode maps of equal text.
func newSetting(l *configs.Loop, modes map[string]*ModeMap) (*setting, error) {
	s := &setting{loop: l, exception: l.Report == configs.Exception, aliveTag: l.AliveTag != ""}
	if l.SampleS > 0 {
		s.sampleMs = max(1, int64(math.Round(l.SampleS*1000)))
	}
	s.silenceMs = max(30_000, 20*s.sampleMs)
	if l.SilenceS > 0 {
		s.silenceMs, s.ownSilence = max(1, int64(math.Round(l.SilenceS*1000))), true
	}
	if s.modes = modes[l.ModeMap]; s.modes == nil {
		m, err := ParseModeMap(l.ModeMap)
		if err != nil {
			return nil, fmt.Errorf("loop %s: mode_map: %w", l.Name, err)
		}
		s.modes, modes[l.ModeMap] = m, m
	}
	if n := max(len(l.ActiveWhen.Terms), len(l.SuppressWhen.Terms)); n > MaxConds/2 {
		return nil, fmt.Errorf("loop %s: %d comparisons in one condition; hint: at most %d", l.Name, n, MaxConds/2)
	}
	s.active = newCondition(l.ActiveWhen, 0)
	s.suppress = newCondition(l.SuppressWhen, MaxConds/2)
	return s, nil
}

// CondRole is the role of the tag of term i (0 to 3) of active_when, or of
// suppress_when.
func CondRole(suppress bool, i int) Role {
	if suppress {
		i += MaxConds / 2
	}
	return RoleCond0 + Role(i)
}

// truth is three-valued: what is not known is neither.
type truth int8

const (
	no      truth = -1
	unknown truth = 0
	yes     truth = 1
)

// condition is a condition of the loop list over the values of the condition
// roles.
type condition []term

type term struct {
	cond  uint8 // index among the condition roles
	group int
	op    string
	value float64
	word  string
}

func newCondition(c configs.Condition, first int) condition {
	var out condition
	for i, t := range c.Terms {
		out = append(out, term{uint8(first + i), t.Group, t.Op, t.Value, strings.ToLower(strings.TrimSpace(t.Word))})
	}
	return out
}

// eval joins the terms of equal group by and, the groups by or. The empty
// condition is unknown.
func (c condition) eval(v *[MaxConds]register) truth {
	if len(c) == 0 || v == nil {
		return unknown
	}
	any := no
	for i := 0; i < len(c); {
		all, g := yes, c[i].group
		for ; i < len(c) && c[i].group == g; i++ {
			all = min(all, c[i].eval(v[c[i].cond].value))
		}
		any = max(any, all)
	}
	return any
}

func (t *term) eval(v float64) truth {
	if v != v {
		return unknown
	}
	if t.word != "" {
		same, known := wordIs(t.word, v)
		switch {
		case !known:
			return unknown
		case t.op == "=":
			return truthOf(same)
		case t.op == "!=":
			return truthOf(!same)
		}
		return unknown // a word has no order
	}
	if v >= textCode {
		return unknown // a word came where a number is compared
	}
	switch t.op {
	case "=":
		return truthOf(v == t.value)
	case "!=":
		return truthOf(v != t.value)
	case "<":
		return truthOf(v < t.value)
	case "<=":
		return truthOf(v <= t.value)
	case ">":
		return truthOf(v > t.value)
	case ">=":
		return truthOf(v >= t.value)
	}
	return unknown
}

// wordIs compares the value of a condition tag with a word: the codes are those
// of [WordMap]; 0 and 1 stand for the usual words of a switch.
func wordIs(word string, v float64) (same, known bool) {
	switch {
	case v == textCode:
		return true, true
	case v == otherCode:
		return false, true
	case v != 0 && v != 1:
		return false, false
	}
	switch word {
	case "true", "on", "yes":
		return v == 1, true
	case "false", "off", "no":
		return v == 0, true
	}
	return false, false
}

func truthOf(b bool) truth {
	if b {
		return yes
	}
	return no
}
