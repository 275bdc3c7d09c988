package daemon

import (
	"bytes"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
)

// evidence is what replay prints of a loop, and the findings of it.
func evidence(t *testing.T, loops []*configs.Loop, csv []byte, of string) (why string, findings []string) {
	t.Helper()
	rd, err := trend.Open([]string{"-"}, loops, trend.Options{Stdin: bytes.NewReader(csv)})
	if err != nil {
		t.Fatal(err)
	}
	defer rd.Close()
	var out, ev bytes.Buffer
	if _, err := Replay(t.Context(), rd, ReplayOptions{Loops: loops, Workers: 1, Findings: &out, Explain: of, Evidence: &ev}); err != nil {
		t.Fatal(err)
	}
	for _, l := range strings.Split(out.String(), "\n") {
		if strings.Contains(l, `"loop":"`+of+`"`) && !strings.Contains(l, "shared-oscillation") {
			findings = append(findings, l)
		}
	}
	return ev.String(), findings
}

// The nuisance budget is one of a loop and year: what is asked of a loop, and what is said
// of it, is the same alone and among many.
func TestThresholdsAreThoseOfOneLoop(t *testing.T) {
	loops, csv := benchTrend(t)
	of := loops[0].Name
	alone, few := evidence(t, loops[:1], csv, of)
	among, many := evidence(t, loops, csv, of)
	if !strings.Contains(alone, "(asked ") {
		t.Fatalf("no limits in the evidence:\n%s", alone)
	}
	if alone != among {
		t.Errorf("alone\n%s\namong %d\n%s", alone, len(loops), among)
	}
	if strings.Join(few, "\n") != strings.Join(many, "\n") {
		t.Errorf("findings alone\n%s\namong %d\n%s", few, len(loops), many)
	}
}

// A loop of which there is no frame has no time, least of all one of 1970.
func TestExplainWithoutFrames(t *testing.T) {
	loops, csv := benchTrend(t)
	l := configs.NewLoop("TIC-220")
	why, _ := evidence(t, append([]*configs.Loop{l}, loops...), csv, l.Name)
	if !strings.HasPrefix(why, "TIC-220: no frame was read; hint: ") || strings.Contains(why, "1970") {
		t.Errorf("%q", why)
	}
}

// A clock that differs is a blind spot of every loop of its source, and of no other's.
func TestClockIsABlindSpot(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.start()
	defer r.stop()
	r.pass(time.Minute)
	for _, x := range []struct {
		ms   int64
		want string
	}{{0, ""}, {4000, ""}, {299_000, "the clock of source works is 5 min behind"}, {-3_600_000, "the clock of source works is 60 min ahead"}} {
		r.scripts["works"].set(func(s *collector.SourceState) { s.ClockOffsetMs = x.ms })
		for _, l := range r.d.Loops() {
			v, _ := r.d.View(l.Loop.Name)
			for _, spots := range [][]string{l.Blind, v.BlindSpots} {
				got := strings.Join(spots, "\n")
				if want := x.want != "" && l.Loop.Source == "works"; strings.Contains(got, "the clock of source") != want || want && !strings.Contains(got, x.want) {
					t.Fatalf("%d ms, %s of %q: %q", x.ms, l.Loop.Name, l.Loop.Source, got)
				}
			}
		}
	}
}
