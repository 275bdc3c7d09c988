package configs

import (
	"bytes"
	"errors"
	"math"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

var sameLoops = cmp.Options{cmpopts.EquateNaNs(), cmpopts.IgnoreFields(Loop{}, "Where")}

func TestFormsOfTheSameList(t *testing.T) {
	want, err := ReadLoopList(strings.NewReader("loop,service,pv_high\nAIC-204,\"residual, \"\"outlet\"\"\",2.5\nFIC-127,,\n"), "l.csv")
	if err != nil {
		t.Fatal(err)
	}
	for name, text := range map[string]string{
		"byte order mark": "\ufeffloop,service,pv_high\nAIC-204,\"residual, \"\"outlet\"\"\",2.5\nFIC-127,,\n",
		"CRLF":            "loop,service,pv_high\r\nAIC-204,\"residual, \"\"outlet\"\"\",2.5\r\nFIC-127,,\r\n",
		"blank lines":     "loop,service,pv_high\n\nAIC-204,\"residual, \"\"outlet\"\"\",2.5\n,,\nFIC-127,,\n,,\n\n\n",
		"other order":     "pv_high,loop,service\n2.5,AIC-204,\"residual, \"\"outlet\"\"\"\n,FIC-127,\n",
		"spaces":          " loop , service,pv_high \nAIC-204 , \"residual, \"\"outlet\"\"\", 2.5\nFIC-127,,\n",
		"comments":        "# list\nloop,service,pv_high\n# row\nAIC-204,\"residual, \"\"outlet\"\"\",2.5\nFIC-127,,",
		"empty columns":   "loop,service,pv_high,,\nAIC-204,\"residual, \"\"outlet\"\"\",2.5,,\nFIC-127,,,,\n",
		"BOM and comment": "\ufeff# list\nloop,service,pv_high\nAIC-204,\"residual, \"\"outlet\"\"\",2.5\nFIC-127,,\n",
	} {
		got, err := ReadLoopList(strings.NewReader(text), "l.csv")
		if err != nil {
			t.Errorf("%s: %v", name, err)
		} else if d := cmp.Diff(want, got, sameLoops); d != "" {
			t.Errorf("%s: %s", name, d)
		}
	}
}

func TestEncodings(t *testing.T) {
	for text, want := range map[string]string{
		"\xff\xfel\x00o\x00":                   `l.csv:1:1: the file is UTF-16; save it as "CSV UTF-8"`,
		"loop,unit\nAIC-204,pH\nTIC-9,\xb0C\n": `l.csv:3:7: the byte 0xB0 is not UTF-8; save it as "CSV UTF-8"`,
		"PK\x03\x04...":                        "l.csv:1:1: the file is a spreadsheet or archive; export it as CSV text",
		"loop\nA\x00B\n":                       "l.csv:2:2: there is a control character (0x00); remove it",
		"":                                     "l.csv:1:1: the loop list is empty; begin with a line of column names such as loop,pv,sp,op",
		"loop,unit,gain\nTIC-9,°C,x\n":         `l.csv:2:10: gain of TIC-9: "x" is no number; write a number such as 12.5`,
		"name;pv\n":                            "l.csv:1:1: the columns are separated by semicolons; separate them by commas, and write numbers with a decimal point",
	} {
		_, err := ReadLoopList(strings.NewReader(text), "l.csv")
		var p Problems
		if !errors.As(err, &p) || err.Error() != want {
			t.Errorf("%q:\n got %v\nwant %s", text, err, want)
		}
	}
}

func TestDefaults(t *testing.T) {
	l := one(t, "loop,pv_low,pv_high,op_low", "L,-10,40,4")
	want := NewLoop("L")
	want.PVLow, want.PVHigh, want.PVRangeGiven, want.OPLow = -10, 40, true, 4
	want.SPLimitLow, want.SPLimitHigh, want.OPLimitLow = -10, 40, 4
	if d := cmp.Diff(want, l, sameLoops); d != "" {
		t.Error(d)
	}
	if l.Duty != Tight || l.NormalMode != "auto" || l.Report != Periodic || l.Form != Ideal {
		t.Errorf("defaults of words: %+v", l)
	}
}

// rich gives every column a value, so that a forgotten one shows.
func rich() string {
	return "loop,was,service,area,source,pv,sp,op,mode,mode_map,alive_tag,gain_tag,reset_tag,position,pv_low,pv_high,op_low,op_high,op_limit_low,op_limit_high,sp_limit_low,sp_limit_high,pv_alarm_low,pv_alarm_high,unit,action,gain,gain_unit,reset,reset_unit,reset_s,rate,rate_unit,rate_s,form,scan_s,sample_s,report,silence_s,pv_filter_s,sp_ramp,process,element,stroke_s,op_split,inner,feedforward,feedforward_kind,normal_mode,duty,offset_ok,recovery_s,active_when,suppress_when,priority\n" +
		"A,A0,serv,area,works,p,s,o,m & n,0/0=manual;1/0=auto,alive,g,r,pos,-1,9,4,20,5,19,0,8,1,7,m,direct,50,band,3,repeats/min,,2,min,,series,0.5,1,exception,30,2,0.1,integrating,valve,20,12,B,ff,add,cascade,averaging,0.2,600,'pump run' = 1 and x >= 2,z != off or y < 3,high\n" +
		"B,,,,,,,,,,,,,,,,,,,,,,,,,,1.5,op-per-pv,,,77,,,3,,,,,,,,,,,,,,,,,,,,,\n" +
		"\"#1, \"\"x\"\"\",,,,,,,,,,,,,,,,,,,,,,,,,,,,none,,,,,,,,,,,,,,,,,,,,,,,,,,\n" +
		"P,,,,,,,,,,,,,,,,,,,,,,,,,,2,,0.1,1/s,,6,s,,parallel,,,,,,,,,,,,,,,,,,,,\n"
}

func TestWriteLoopListReadsBackEqual(t *testing.T) {
	loops, err := ReadLoopList(strings.NewReader(rich()), "l.csv")
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range columns {
		found := false
		for _, l := range loops {
			found = found || c.get(l) != ""
		}
		if !found {
			t.Errorf("no loop of the test has the column %s", c.name)
		}
	}
	assertRoundTrip(t, loops)
}

func assertRoundTrip(t *testing.T, loops []*Loop) {
	t.Helper()
	var b bytes.Buffer
	if err := WriteLoopList(&b, loops); err != nil {
		t.Fatal(err)
	}
	back, err := ReadLoopList(bytes.NewReader(b.Bytes()), "written.csv")
	if err != nil {
		t.Fatalf("%v\n%s", err, b.Bytes())
	}
	if d := cmp.Diff(loops, back, sameLoops); d != "" {
		t.Fatalf("%s\n%s", d, b.Bytes())
	}
	for i := range loops {
		if ch := Difference(loops[i], back[i]); ch != ChangeNone {
			t.Fatalf("%s differs after writing: %v", loops[i].Name, ch)
		}
	}
}

func TestDifference(t *testing.T) {
	loops, err := ReadLoopList(strings.NewReader(rich()), "l.csv")
	if err != nil {
		t.Fatal(err)
	}
	base := loops[0]
	edit := func(f func(*Loop)) *Loop {
		l := *base
		f(&l)
		l.settleTuning()
		return &l
	}
	for _, x := range []struct {
		name string
		new  *Loop
		want Change
	}{
		{"nothing", edit(func(*Loop) {}), ChangeNone},
		{"place", edit(func(l *Loop) { l.Where.Line = 99 }), ChangeNone},
		{"service", edit(func(l *Loop) { l.Service = "x" }), ChangeText},
		{"priority", edit(func(l *Loop) { l.Priority = "low" }), ChangeText},
		{"gain", edit(func(l *Loop) { l.Gain = 60 }), ChangeVerdict},
		{"reset to none", edit(func(l *Loop) { l.PropOnly = true }), ChangeVerdict},
		{"form", edit(func(l *Loop) { l.Form = Ideal }), ChangeVerdict},
		{"normal mode", edit(func(l *Loop) { l.NormalMode = "auto" }), ChangeVerdict},
		{"duty", edit(func(l *Loop) { l.Duty = Tight }), ChangeVerdict},
		{"alarm gone", edit(func(l *Loop) { l.PVAlarmLow = math.NaN() }), ChangeVerdict},
		{"condition", edit(func(l *Loop) { l.ActiveWhen = Condition{} }), ChangeVerdict},
		{"range", edit(func(l *Loop) { l.PVHigh = 10 }), ChangeMemory},
		{"action", edit(func(l *Loop) { l.Action = Reverse }), ChangeMemory},
		{"process", edit(func(l *Loop) { l.Process = SelfRegulating }), ChangeMemory},
		{"sampling", edit(func(l *Loop) { l.SampleS = 2 }), ChangeMemory},
		{"tag", edit(func(l *Loop) { l.PV = "q" }), ChangeMemory},
		{"source", edit(func(l *Loop) { l.Source = "other" }), ChangeMemory},
		{"text and tag", edit(func(l *Loop) { l.Service, l.OP = "x", "q" }), ChangeMemory},
	} {
		if got := Difference(base, x.new); got != x.want || Difference(x.new, base) != x.want {
			t.Errorf("%s: %v, want %v", x.name, got, x.want)
		}
		if SameIdentity(base, x.new) != (x.want < ChangeMemory) || SameVerdict(base, x.new) != (x.want < ChangeVerdict) {
			t.Errorf("%s: SameIdentity or SameVerdict disagree", x.name)
		}
	}
}

func TestSameTuningWrittenOtherwise(t *testing.T) {
	a := one(t, "loop,gain,reset,reset_unit,reset_tag", "L,1,2,repeats/min,")
	b := one(t, "loop,gain,reset,reset_unit,reset_tag", "L,1,30,s,")
	if got := Difference(a, b); got != ChangeText {
		t.Errorf("2 repeats/min and 30 s: %v", got)
	}
	a = one(t, "loop,gain,reset,reset_unit,reset_tag", "L,1,2,repeats/min,r")
	b = one(t, "loop,gain,reset,reset_unit,reset_tag", "L,1,30,s,r")
	if got := Difference(a, b); got != ChangeVerdict {
		t.Errorf("the tag is read in another unit now: %v", got)
	}
	// The PV span enters the gain per PV unit; a range given is no guess any more.
	if got := Difference(one(t, "loop,pv_high", "L,"), one(t, "loop,pv_high", "L,100")); got < ChangeVerdict {
		t.Errorf("range confirmed: %v", got)
	}
}

func TestStructure(t *testing.T) {
	const list = `loop,source,pv,sp,op,inner,mode,gain_tag
OUT,a,p1,s1,x,,m,
IN,a,p2,x,o2,,m,
SEL1,a,p3,s3,v,,m,t
SEL2,a,p3,s4,v,,m,t
OTHER,b,p3,s5,v,,,
BYNAME,b,p6,s6,o6,OTHER,,
BOTH,a,p7,s7,a8,BOTHIN,,
BOTHIN,b,p8,a!a8,o8,,,
`
	loops, err := ReadLoopList(strings.NewReader(list), "l.csv")
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, l := range Structure(loops) {
		got = append(got, l.String())
	}
	want := []string{
		"cascade: OUT sets the set point of IN (outer OP is inner SP: a!x)",
		"cascade: BOTH sets the set point of BOTHIN (outer OP is inner SP: a!a8)",
		"cascade: BYNAME sets the set point of OTHER (column inner)",
		"shared output, read as selector or standby: SEL1, SEL2 (a!v)",
		"shared measurement: SEL1, SEL2 (a!p3)",
		"shared tag: SEL1, SEL2 (a!t)",
	}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
}

func TestCondition(t *testing.T) {
	c, err := ParseCondition(`nsu=urn:kf;s=P-310.Run = 1 and 'pump room/v''s' != "not closed" OR x >= -2.5`)
	if err != nil {
		t.Fatal(err)
	}
	want := []Term{
		{Tag: "nsu=urn:kf;s=P-310.Run", Op: "=", Value: 1},
		{Tag: "pump room/v's", Op: "!=", Value: math.NaN(), Word: "not closed"},
		{Tag: "x", Op: ">=", Value: -2.5, Group: 1},
	}
	if d := cmp.Diff(want, c.Terms, cmpopts.EquateNaNs()); d != "" {
		t.Error(d)
	}
	if c, err := ParseCondition("  "); err != nil || len(c.Terms) != 0 {
		t.Errorf("an empty condition: %v %v", c, err)
	}
}

func TestSplitTag(t *testing.T) {
	for tag, want := range map[string][2]string{
		"kf/pv":                  {"loop", "kf/pv"},
		"gateway!kf/pv":          {"gateway", "kf/pv"},
		"gateway!a!b":            {"gateway", "a!b"},
		"kf/a!b":                 {"loop", "kf/a!b"}, // "kf/a" is no source name
		"nsu=urn:x;s=A!B":        {"loop", "nsu=urn:x;s=A!B"},
		"works!nsu=urn:x;s=A!B":  {"works", "nsu=urn:x;s=A!B"},
		"/Objects/A!B":           {"loop", "/Objects/A!B"},
		"!x":                     {"loop", "!x"},
		"group/node/dev#metric!": {"loop", "group/node/dev#metric!"},
	} {
		if s, a := SplitTag(tag, "loop"); s != want[0] || a != want[1] {
			t.Errorf("%s: %q %q, want %q", tag, s, a, want)
		}
	}
}

func FuzzReadLoopList(f *testing.F) {
	f.Add(rich())
	f.Add("loop,pv_high\nA,1e-320\n\"b \",0.5\n")
	f.Add("loop;pv\nA;1,5\n")
	f.Add("\ufeffloop,active_when\r\nA,\"'x y' = 'a' and b < 3\"\r\n")
	f.Add("loop,gain,reset,form,rate\nA,1e30,1e-30,series,1e30\n")
	f.Fuzz(func(t *testing.T, text string) {
		loops, err := ReadLoopList(strings.NewReader(text), "f.csv")
		if err != nil {
			var p Problems
			if !errors.As(err, &p) || len(p) == 0 {
				t.Fatalf("not Problems: %v", err)
			}
			for _, x := range p {
				if x.File != "f.csv" || x.Line < 1 || x.What == "" {
					t.Fatalf("a problem without a place: %+v", x)
				}
			}
			return
		}
		assertRoundTrip(t, loops)
		Structure(loops)
		for _, l := range loops {
			if strings.ContainsAny(l.DescribeTuning(), "\n") {
				t.Fatal("more than one line")
			}
			if math.IsInf(l.GainPct, 0) || math.IsInf(l.IdealReset, 0) {
				t.Fatalf("tuning is not finite: %+v", l)
			}
		}
	})
}

func BenchmarkReadLoopList(b *testing.B) {
	const n = 10000
	var text strings.Builder
	text.WriteString("loop,source,pv,sp,op,mode,mode_map,pv_low,pv_high,action,gain,gain_unit,reset,reset_unit,active_when\n")
	for i := range n {
		name := "AIC-" + string(rune('A'+i%26)) + formatNumber(float64(i))
		tag := ",nsu=urn:kestrel-fen:plant;s=" + name
		text.WriteString(name + ",works" + tag + ".PV" + tag + ".SP" + tag + ".OP" + tag + ".Mode,0=manual;1=auto,0,2,reverse,125,band,2,repeats/min,nsu=urn:kestrel-fen:plant;s=P.Run = 1\n")
	}
	b.ReportAllocs()
	for b.Loop() {
		loops, err := ReadLoopList(strings.NewReader(text.String()), "l.csv")
		if err != nil || len(loops) != n {
			b.Fatal(err)
		}
	}
}
