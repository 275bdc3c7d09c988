package configs

import "strings"

// column is one column of the loop list, and one field of an entry of loops:
// how it is read, written, explained, and what a change of it means.
type column struct {
	name   string
	group  string
	def    string // in words, for the reference; "" is unknown or none
	help   string
	change Change
	set    func(l *Loop, s string) *mistake // s is never empty
	get    func(l *Loop) string             // effective, so that set(get) gives the same
}

const (
	groupWhere   = "What and where"
	groupRanges  = "Ranges"
	groupControl = "Controller, as the faceplate shows it"
	groupProcess = "Process"
	groupNormal  = "What is normal"
)

// columns is the loop list: one row a column, in the order in which it is
// written.
var columns = []column{
	textCol("loop", groupWhere, "", "name of the loop: 1 to 64 printable characters, unique", ChangeText, func(l *Loop) *string { return &l.Name }),
	textCol("was", groupWhere, "", "name before a rename; the loop keeps its memory and window", ChangeText, func(l *Loop) *string { return &l.Was }),
	textCol("service", groupWhere, "", "what it does, in the plant's words", ChangeText, func(l *Loop) *string { return &l.Service }),
	textCol("area", groupWhere, "", "part of the plant; for routes and grouping", ChangeText, func(l *Loop) *string { return &l.Area }),
	textCol("source", groupWhere, "the only source, if there is one", "name of the source of the tags", ChangeMemory, func(l *Loop) *string { return &l.Source }),
	textCol("pv", groupWhere, "", "tag of the process variable", ChangeMemory, func(l *Loop) *string { return &l.PV }),
	textCol("sp", groupWhere, "", "tag of the set point in force", ChangeMemory, func(l *Loop) *string { return &l.SP }),
	textCol("op", groupWhere, "", "tag of the controller output (elsewhere MV, CO, OUT)", ChangeMemory, func(l *Loop) *string { return &l.OP }),
	textCol("mode", groupWhere, "mode inferred", "tag of the actual mode; two tags are joined by \" & \"", ChangeMemory, func(l *Loop) *string { return &l.ModeTag }),
	modeMapCol,
	textCol("alive_tag", groupWhere, "", "tag that changes as long as the controller lives", ChangeMemory, func(l *Loop) *string { return &l.AliveTag }),
	textCol("gain_tag", groupWhere, "", "tag of the gain, in gain_unit", ChangeMemory, func(l *Loop) *string { return &l.GainTag }),
	textCol("reset_tag", groupWhere, "", "tag of the reset, in reset_unit", ChangeMemory, func(l *Loop) *string { return &l.ResetTag }),
	textCol("position", groupWhere, "", "tag of the actual stem, speed or stroke", ChangeMemory, func(l *Loop) *string { return &l.Position }),

	rangeCol("pv_low", "0", "scale of PV, low end", ChangeMemory, func(l *Loop) *float64 { return &l.PVLow }, true),
	rangeCol("pv_high", "100", "scale of PV, high end", ChangeMemory, func(l *Loop) *float64 { return &l.PVHigh }, true),
	rangeCol("op_low", "0", "scale of OP, low end", ChangeMemory, func(l *Loop) *float64 { return &l.OPLow }, false),
	rangeCol("op_high", "100", "scale of OP, high end", ChangeMemory, func(l *Loop) *float64 { return &l.OPHigh }, false),
	numberCol("op_limit_low", groupRanges, "op_low", "low limit of OP as set in the controller, OP units", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.OPLimitLow }),
	numberCol("op_limit_high", groupRanges, "op_high", "high limit of OP as set in the controller, OP units", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.OPLimitHigh }),
	numberCol("sp_limit_low", groupRanges, "pv_low", "low limit of SP as set in the controller, PV units", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.SPLimitLow }),
	numberCol("sp_limit_high", groupRanges, "pv_high", "high limit of SP as set in the controller, PV units", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.SPLimitHigh }),
	numberCol("pv_alarm_low", groupRanges, "", "low alarm of PV, PV units; for the time left in advisories", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.PVAlarmLow }),
	numberCol("pv_alarm_high", groupRanges, "", "high alarm of PV, PV units", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.PVAlarmHigh }),
	textCol("unit", groupRanges, "", "unit of PV, for texts", ChangeText, func(l *Loop) *string { return &l.Unit }),

	wordCol("action", groupControl, "unknown: learnt", "reverse: OP falls when PV rises; direct: OP rises when PV rises", ChangeMemory, actionWords, 1, func(l *Loop) *Action { return &l.Action }),
	numberCol("gain", groupControl, "", "gain or proportional band, in gain_unit; the action carries the sign", ChangeText, gainNumber, func(l *Loop) *float64 { return &l.Gain }),
	wordCol("gain_unit", groupControl, "gain", "gain: % of OP per % of PV; band: proportional band in %; op-per-pv: OP units per PV unit", ChangeText, gainUnitWords, 0, func(l *Loop) *GainUnit { return &l.GainUnit }),
	resetCol,
	wordCol("reset_unit", groupControl, "s", "s, min: time; repeats/min, repeats/s: rate; 1/s, 1/min: integral gain of the parallel form", ChangeText, resetUnits, 0, func(l *Loop) *ResetUnit { return &l.ResetUnit }),
	resetSecondsCol,
	numberCol("rate", groupControl, "none", "derivative action, in rate_unit; with form parallel the derivative gain", ChangeText, zeroOrMore, func(l *Loop) *float64 { return &l.Rate }),
	wordCol("rate_unit", groupControl, "s", "unit of rate", ChangeText, rateUnits, 0, func(l *Loop) *RateUnit { return &l.RateUnit }),
	rateSecondsCol,
	wordCol("form", groupControl, "ideal", "form of the law: ideal (ISA standard), series (interacting), parallel (independent gains)", ChangeVerdict, formWords, 0, func(l *Loop) *Form { return &l.Form }),
	numberCol("scan_s", groupControl, "", "interval of the controller, s", ChangeMemory, aboveZero, func(l *Loop) *float64 { return &l.ScanS }),
	numberCol("sample_s", groupControl, "learnt", "interval of the data, s", ChangeMemory, aboveZero, func(l *Loop) *float64 { return &l.SampleS }),
	wordCol("report", groupControl, "periodic", "periodic: the source sends every interval; exception: only on change", ChangeMemory, reportWords, 0, func(l *Loop) *Report { return &l.Report }),
	numberCol("silence_s", groupControl, "from the interval of the data", "s without a sign of life until the data count as stale", ChangeVerdict, aboveZero, func(l *Loop) *float64 { return &l.SilenceS }),
	numberCol("pv_filter_s", groupControl, "", "time constant of the controller's PV filter, s; with a third of the reset time and more it is called too heavy, and a cycle at which it lags by 15 degrees and more says so", ChangeVerdict, zeroOrMore, func(l *Loop) *float64 { return &l.PVFilterS }),
	numberCol("sp_ramp", groupControl, "none", "ramp of SP inside the controller, PV units per second: PV is judged against the ramp, also where the tag shows the target", ChangeVerdict, zeroOrMore, func(l *Loop) *float64 { return &l.SPRamp }),

	wordCol("process", groupProcess, "learnt where it can be", "self-regulating, integrating (levels) or runaway", ChangeMemory, processWords, 1, func(l *Loop) *Process { return &l.Process }),
	choiceCol("element", groupProcess, "", "final element", ChangeVerdict, elementWords, func(l *Loop) *string { return &l.Element }),
	numberCol("stroke_s", groupProcess, "", "time of a full stroke of the element, s; where OP travels more in half a cycle than the element can, it is named among the causes", ChangeVerdict, zeroOrMore, func(l *Loop) *float64 { return &l.StrokeS }),
	numberCol("op_split", groupProcess, "none", "OP at which a split range changes over, OP units", ChangeVerdict, anyNumber, func(l *Loop) *float64 { return &l.OPSplit }),
	textCol("inner", groupProcess, "", "name of the loop whose SP this OP sets (cascade)", ChangeVerdict, func(l *Loop) *string { return &l.Inner }),
	textCol("feedforward", groupProcess, "", "tag of the feed-forward signal", ChangeMemory, func(l *Loop) *string { return &l.Feedforward }),
	choiceCol("feedforward_kind", groupProcess, "", "how the feed-forward enters OP: add or multiply", ChangeMemory, ffWords, func(l *Loop) *string { return &l.FeedforwardKind }),

	choiceCol("normal_mode", groupNormal, "auto", "mode the loop should be in", ChangeVerdict, ModeWords, func(l *Loop) *string { return &l.NormalMode }),
	wordCol("duty", groupNormal, "tight", "what the loop is for; decides which kinds are judged, and how", ChangeVerdict, dutyWords, 0, func(l *Loop) *Duty { return &l.Duty }),
	numberCol("offset_ok", groupNormal, "none", "offset from SP that is no matter, PV units", ChangeVerdict, zeroOrMore, func(l *Loop) *float64 { return &l.OffsetOK }),
	numberCol("recovery_s", groupNormal, "learnt", "usual time to recover from a disturbance, s", ChangeVerdict, aboveZero, func(l *Loop) *float64 { return &l.RecoveryS }),
	conditionCol("active_when", "the law can act while this holds (pump runs, valve not bypassed)", func(l *Loop) *Condition { return &l.ActiveWhen }),
	conditionCol("suppress_when", "advisories are suppressed by design while this holds (cleaning, start-up)", func(l *Loop) *Condition { return &l.SuppressWhen }),
	choiceCol("priority", groupNormal, "normal", "low, normal or high; for the order of advisories", ChangeText, priorityWords, func(l *Loop) *string { return &l.Priority }),
}

var columnNames = func() []string {
	names := make([]string, len(columns))
	for i, c := range columns {
		names[i] = c.name
	}
	return names
}()

var columnIndex = func() map[string]int {
	m := map[string]int{}
	for i, c := range columns {
		m[c.name] = i
	}
	return m
}()

// otherNames are what loop lists elsewhere call these columns.
var otherNames = map[string]string{"name": "loop", "tag": "loop", "description": "service", "mv": "op", "co": "op", "out": "op",
	"output": "op", "setpoint": "sp", "kp": "gain", "kc": "gain", "pb": "gain (with gain_unit band)", "ti": "reset", "ki": "reset (with form parallel)",
	"td": "rate", "kd": "rate (with form parallel)", "units": "unit", "type": "process"}

func unknownColumn(name string) string {
	if other, ok := otherNames[strings.ToLower(name)]; ok {
		return "did you mean " + other + "?"
	}
	return didYouMean(name, columnNames)
}

// LoopColumns are the names of all columns of the loop list, in order.
func LoopColumns() []string { return append([]string(nil), columnNames...) }

func textCol(name, group, def, help string, ch Change, p func(*Loop) *string) column {
	return column{name, group, def, help, ch,
		func(l *Loop, s string) *mistake {
			*p(l) = s
			return printable(s)
		},
		func(l *Loop) string { return *p(l) }}
}

func choiceCol(name, group, def, help string, ch Change, words []string, p func(*Loop) *string) column {
	return column{name, group, def, help, ch,
		func(l *Loop, s string) *mistake {
			_, m := word(s, words)
			if m == nil {
				*p(l) = s
			}
			return m
		},
		func(l *Loop) string { return *p(l) }}
}

// wordCol reads a word into an enumeration whose first named value is base.
func wordCol[E ~uint8](name, group, def, help string, ch Change, words []string, base int, p func(*Loop) *E) column {
	return column{name, group, def, help, ch,
		func(l *Loop, s string) *mistake {
			i, m := word(s, words)
			if m == nil {
				*p(l) = E(i + base)
			}
			return m
		},
		func(l *Loop) string { return wordOrEmpty(int(*p(l))-base, words) }}
}

type bound uint8

const (
	anyNumber bound = iota
	zeroOrMore
	aboveZero
	gainNumber
)

func (b bound) check(x float64, s string) *mistake {
	switch {
	case b == gainNumber && x < 0:
		return wrong("write the size of the gain, and action direct or reverse", "the gain %s is negative", s)
	case b == gainNumber && x == 0:
		return wrong("write the gain, or leave it empty when it is not known", "the gain is 0")
	case b == aboveZero && x <= 0:
		return wrong("write a number above 0", "%s is not above 0", s)
	case b == zeroOrMore && x < 0:
		return wrong("write 0 or a number above", "%s is negative", s)
	}
	return nil
}

func numberCol(name, group, def, help string, ch Change, b bound, p func(*Loop) *float64) column {
	return column{name, group, def, help, ch,
		func(l *Loop, s string) *mistake {
			x, m := parseNumber(s)
			if m == nil {
				m = b.check(x, s)
			}
			if m == nil {
				*p(l) = x
			}
			return m
		},
		func(l *Loop) string { return formatNumber(*p(l)) }}
}

// rangeCol is an end of a scale. A PV scale that was not given is a guess, and
// stays one when the list is written.
func rangeCol(name, def, help string, ch Change, p func(*Loop) *float64, pv bool) column {
	c := numberCol(name, groupRanges, def, help, ch, anyNumber, p)
	if !pv {
		return c
	}
	set, get := c.set, c.get
	c.set = func(l *Loop, s string) *mistake {
		l.PVRangeGiven = true
		return set(l, s)
	}
	c.get = func(l *Loop) string {
		if !l.PVRangeGiven {
			return ""
		}
		return get(l)
	}
	return c
}

func conditionCol(name, help string, p func(*Loop) *Condition) column {
	return column{name, groupNormal, "", help, ChangeVerdict,
		func(l *Loop, s string) *mistake {
			if m := printable(s); m != nil {
				return m
			}
			c, m := parseCondition(s)
			if m == nil {
				*p(l) = c
			}
			return m
		},
		func(l *Loop) string { return p(l).Text }}
}

var modeMapCol = column{"mode_map", groupWhere, "the usual words", "what the values of mode mean: VALUE=MODE separated by semicolons, 0=manual;1=auto; for two tags pairs, 0/0=manual;1/0=auto", ChangeMemory,
	func(l *Loop, s string) *mistake {
		if m := printable(s); m != nil {
			return m
		}
		_, m := checkModeMap(s)
		l.ModeMap = s
		return m
	},
	func(l *Loop) string { return l.ModeMap }}

var resetCol = column{"reset", groupControl, "", "integral action, in reset_unit; none = P-only by design", ChangeText,
	func(l *Loop, s string) *mistake {
		l.ResetGiven = true
		if strings.EqualFold(s, "none") {
			l.PropOnly = true
			return nil
		}
		x, m := parseReset(s)
		if m == nil {
			l.Reset = x
		}
		return m
	},
	func(l *Loop) string {
		if l.PropOnly {
			return "none"
		}
		return formatNumber(l.Reset)
	}}

var resetSecondsCol = column{"reset_s", groupControl, "", "reset time in seconds, or none; instead of reset", ChangeText,
	func(l *Loop, s string) *mistake {
		l.ResetGiven = true
		if strings.EqualFold(s, "none") {
			l.PropOnly = true
			return nil
		}
		x, m := parseReset(s)
		if m == nil {
			l.ResetS = x
		}
		return m
	},
	func(l *Loop) string {
		if formatNumber(l.Reset) != "" || l.PropOnly {
			return ""
		}
		return formatNumber(l.ResetS)
	}}

func parseReset(s string) (float64, *mistake) {
	x, m := parseNumber(s)
	switch {
	case m != nil:
	case x == 0:
		m = wrong("write none for a controller without integral action", "0 means something else in every make")
	case x < 0:
		m = wrong("write a number above 0", "%s is negative", s)
	}
	return x, m
}

var rateSecondsCol = column{"rate_s", groupControl, "0", "rate time in seconds; instead of rate", ChangeText,
	func(l *Loop, s string) *mistake {
		x, m := parseNumber(s)
		if m == nil {
			m = zeroOrMore.check(x, s)
		}
		if m == nil {
			l.RateS = x
		}
		return m
	},
	func(l *Loop) string {
		if formatNumber(l.Rate) != "" || l.RateS == 0 {
			return ""
		}
		return formatNumber(l.RateS)
	}}
