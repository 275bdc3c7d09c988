package main

import (
	"bytes"
	"strings"
	"testing"

	"midwatch/alert/page/api"
	"midwatch/cmd/internal/daemon"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

// check, status and replay say how many loops are judged, and what keeps the watch from
// seeing the others.
func TestSummariesSayWhatIsNotSeen(t *testing.T) {
	const spot = "no OP: saturation cannot be seen"
	fic, lic := configs.NewLoop("FIC-118"), configs.NewLoop("LIC-310")
	fic.Service, lic.Service = "filter 3 outlet flow", "clear well level"
	rows := api.Loops([]api.LoopState{{Loop: fic, State: detect.CannotJudge, Why: spot, Blind: []string{spot, "no mode"}}, {Loop: lic, State: detect.Judged}})
	var check, status, replay bytes.Buffer
	c := &configs.Config{File: "midwatch.yaml", Loops: []*configs.Loop{fic, lic}}
	r := checked{File: c.File, Loops: loopsChecked(c.Loops, rows), States: &api.LoopCounts{Total: 2, Judged: 1, CannotJudge: 1}}
	if err := r.print(&check, c); err != nil {
		t.Fatal(err)
	}
	s := api.Status{Site: "Kestrel Fen", Loops: api.LoopCounts{Total: 2, Judged: 1, CannotJudge: 1}}
	if err := printStatus(&status, &s, rows, true); err != nil {
		t.Fatal(err)
	}
	const counts = "judged 1, cannot judge 1, not in normal mode 0, held 0"
	for verb, out := range map[string]string{"check": check.String(), "status": status.String()} {
		for _, want := range []string{counts, spot, "no mode"} {
			if !strings.Contains(out, want) {
				t.Errorf("%s does not say %q:\n%s", verb, want, out)
			}
		}
	}

	// A blind spot breaks no column: services stand below each other.
	at := -1
	for line := range strings.SplitSeq(status.String(), "\n") {
		if i := max(strings.Index(line, "SERVICE"), strings.Index(line, "filter 3"), strings.Index(line, "clear well"), strings.Index(line, "blind spot: no mode")); i >= 0 {
			if at >= 0 && i != at {
				t.Errorf("columns are broken:\n%s", status.String())
			}
			at = i
		}
	}

	csv := "time,loop,pv,sp,op,flags\n2026-01-05T00:00:00Z,LIC-310,1,1,50,\n2026-01-05T00:00:10Z,LIC-310,1,1,50,\n"
	loops := []*configs.Loop{fic, lic}
	rd, err := trend.Open([]string{"-"}, loops, trend.Options{Stdin: strings.NewReader(csv)})
	if err != nil {
		t.Fatal(err)
	}
	defer rd.Close()
	sum, err := daemon.Replay(t.Context(), rd, daemon.ReplayOptions{Loops: loops, Workers: 1, Findings: &bytes.Buffer{}})
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	for _, u := range sum.Unseen {
		n += len(u.Loops)
	}
	if n != sum.Loops-sum.Judged || n == 0 {
		t.Errorf("%d loops listed as not judged, %+v", n, sum)
	}
	printSummary(&replay, sum, false)
	if !strings.Contains(replay.String(), "not judged FIC-118: no value yet") {
		t.Errorf("replay does not say why:\n%s", replay.String())
	}
}

// Kinds that are facts have no cause: status leaves it empty, and says of the others that
// it is undetermined.
func TestStatusNamesNoCauseOfAFact(t *testing.T) {
	s := api.Status{Site: "Kestrel Fen"}
	for _, k := range []detect.Kind{detect.NotInNormalMode, detect.SluggishRecovery} {
		s.Episodes = append(s.Episodes, api.Episode{ID: string(k), Finding: detect.Finding{Subject: detect.Subject{Loop: "AIC-204"}, Kind: k, Cause: detect.Undetermined}})
	}
	var b bytes.Buffer
	if err := printStatus(&b, &s, nil, false); err != nil {
		t.Fatal(err)
	}
	for line := range strings.Lines(b.String()) {
		if strings.HasPrefix(line, string(detect.NotInNormalMode)) && strings.Contains(line, "undetermined") ||
			strings.HasPrefix(line, string(detect.SluggishRecovery)) && !strings.Contains(line, "undetermined") {
			t.Errorf("%s", line)
		}
	}
	if !strings.Contains(b.String(), "undetermined") {
		t.Error(b.String())
	}
}
