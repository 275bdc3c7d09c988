package configs

import (
	"strings"
	"testing"
)

func TestAddresses(t *testing.T) {
	ua := &Source{OPCUA: &OPCUA{}}
	mq := func(payload string) *Source { return &Source{MQTT: &MQTT{Payload: payload}} }
	long := strings.Repeat("t", 65536)
	for _, x := range []struct {
		source *Source
		good   []string
		bad    []string
	}{
		{ua, []string{"nsu=urn:kestrel-fen:plant;s=AIC-204.PV", "ns=2;s=A;B=C", "ns=0;i=2258", "nsu=http://kf.example/UA/;i=42",
			"ns=3;g=09087e75-8e5e-499b-954f-f2a9603db28a", "ns=3;b=M/RbKBsRVkePCePcx24oRA==", "/Objects/KestrelFen/AIC-204/PV", "/Objects/2:KestrelFen/3:PV", "ns=2;s= x"},
			[]string{"", "AIC-204.PV", "s=PV", "i=85", "g=x", "ns=;s=x", "ns=-1;s=x", "ns=02;s=x", "ns=70000;s=x", "nsu=;s=x", "ns=2;", "ns=2;s=", "ns=2;x=1",
				"ns=2;i=1.5", "ns=2;i=4294967296", "ns=2;g=123", "ns=2;b=%%%", "/Objects", "/Objects/", "/Root/Objects/PV", "/Objects/A//PV", "/Objects/A/", "svr=1;ns=2;s=x", "ns=2"}},
		{mq("json"), []string{"kestrel-fen/aic-204", "kestrel-fen/aic-204#pv", "kf/a#values.pv.now", "a+b/c", "/kf/pv", "kf/a b"},
			[]string{"", "#pv", "kf/#", "kf/+/pv", "+", "kf/pv#", "kf/pv#a..b", "kf/pv#.a", "$share/g/kf/pv", "$queue/kf/pv", "ns=2;s=x", "nsu=urn:x;s=y", long}},
		{mq("plain"), []string{"kestrel-fen/aic-204/pv"}, []string{"kf/pv#v", "kf/#", "$share/g/kf/pv"}},
		{mq("sparkplug"), []string{"kf/node/dev#PV", "kf/node#PV", "kf/node/dev#Loop 1/PV", "kf/node/dev#a#b"},
			[]string{"", "kf/node/dev", "kf/node/dev#", "kf#PV", "kf//dev#PV", "kf/+/dev#PV", "a/b/c/d#PV", "spBv1.0/kf/DDATA/node/dev#PV"}},
	} {
		for _, a := range x.good {
			if m := checkAddress(a, x.source); m != nil {
				t.Errorf("%q refused: %s", a, m.what)
			}
		}
		for _, a := range x.bad {
			if m := checkAddress(a, x.source); m == nil || m.what == "" {
				t.Errorf("%.40q taken", a)
			}
		}
	}
}

func TestCheckModeMap(t *testing.T) {
	for s, pairs := range map[string]bool{"": false, "0=manual;1=auto;2=cascade;16=tracking": false, " 0 = manual ; ; MAN=auto ;": false,
		"0/0=manual;1/0=auto": true, "x=": false} {
		if got, err := CheckModeMap(s); err != nil || got != pairs {
			t.Errorf("%q: %v %v", s, got, err)
		}
	}
	for _, s := range []string{"0", "0=man", "0=manual,1=auto", "0=manual;1/0=auto", "0=Manual", "0==auto"} {
		if _, err := CheckModeMap(s); err == nil {
			t.Errorf("%q taken", s)
		}
	}
}

func TestTagsOfALoop(t *testing.T) {
	l := one(t, "loop,source,pv,mode,mode_map,active_when", "L,works,gateway!kf/pv,m1 & m2,0/0=auto,x = 1 and gateway!kf/y = 2")
	want := []TagUse{
		{"pv", "gateway!kf/pv", "gateway", "kf/pv"}, {"mode", "m1", "works", "m1"}, {"mode", "m2", "works", "m2"},
		{"active_when", "x", "works", "x"}, {"active_when", "gateway!kf/y", "gateway", "kf/y"},
	}
	got := l.Tags()
	if len(got) != len(want) {
		t.Fatalf("%+v", got)
	}
	for i := range want {
		if got[i] != want[i] {
			t.Errorf("%+v, want %+v", got[i], want[i])
		}
	}
}

// The words of the enumerations are those of the loop list, and unknown is empty.
func TestWords(t *testing.T) {
	l := one(t, "loop,action,process,duty,form,gain,gain_unit,reset,reset_unit,rate_unit,report",
		"L,direct,runaway,start-stop,series,1,band,1,repeats/s,min,exception")
	got := strings.Join([]string{l.Action.String(), l.Process.String(), l.Duty.String(), l.Form.String(), l.GainUnit.String(),
		l.ResetUnit.String(), l.RateUnit.String(), l.Report.String()}, " ")
	if want := "direct runaway start-stop series band repeats/s min exception"; got != want {
		t.Errorf("%s, want %s", got, want)
	}
	if l.Sign() != -1 || (&Loop{}).Sign() != 0 || (&Loop{Action: Reverse}).Sign() != 1 {
		t.Error("the sign is that of the action")
	}
	if s := ActionUnknown.String() + ProcessUnknown.String() + Duty(99).String(); s != "" {
		t.Errorf("unknown: %q", s)
	}
}
