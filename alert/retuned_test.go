package alert

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

// TestSinceTheTuning: the digest gives the verdict of the comparison of trends,
// and counts what came before a change of tuning and after it, where there is
// enough of both. There is one verdict: the counts make none.
func TestSinceTheTuning(t *testing.T) {
	type swing struct {
		day, amplitude float64
		stays          bool
	}
	for _, c := range []struct {
		name    string
		changed float64 // day of the change
		swings  []swing
		until   float64 // day of the digest
		outcome Outcome
		want    string
		not     string
	}{
		{"fewer", 10, []swing{{1, 6, false}, {5, 6, false}, {8, 5, false}, {14, 2, false}}, 18,
			Outcome{At: 1, Settled: true, Verdict: "PV keeps closer to SP since the change"},
			"PV keeps closer to SP since the change; 2 troubles in 8 d before, 1 in as long after; largest 6 % of span before, 2 % after", "so far"},
		{"more", 10, []swing{{8, 2, false}, {12, 3, false}, {15, 4, false}}, 18, Outcome{At: 1, Verdict: "no difference that holds"},
			"so far, no difference that holds; 1 trouble in 8 d before, 2 in as long after; largest 2 % of span before, 4 % after", "worse"},
		{"as many, smaller", 10, []swing{{8, 6, false}, {14, 2, false}}, 18, Outcome{}, "not compared yet; 1 trouble in 8 d before, 1 in as long after; largest 6 % of span before, 2 % after", "better"},
		{"did not go", 10, []swing{{8, 6, true}}, 18, Outcome{}, "1 trouble in 8 d before, 1 in as long after", "better"},
		{"too early", 10, []swing{{8, 6, false}}, 12, Outcome{}, "not compared yet", "trouble"},
		{"nothing known before", 2, []swing{{1, 6, false}, {8, 6, false}}, 18, Outcome{}, "not compared yet", "trouble"},
		{"quiet", 10, nil, 18, Outcome{}, "no trouble in 8 d before or after", "better"},
		{"long ago", 10, []swing{{8, 6, false}}, 45, Outcome{}, "", "AIC-204, changed"},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t, func(s *Settings) { s.Advise.Digest.Daily = "16:00"; s.Advise.Digest.To = []string{"mail"} })
			r.run(start)
			hour := func(day float64) float64 { return day * 24 * 60 }
			r.hear(f("TIC-401", detect.FrozenPV, detect.Raised, 0))
			var fs []detect.Finding
			for _, s := range c.swings {
				fs = append(fs, f("AIC-204", detect.SustainedOscillation, detect.Raised, hour(s.day), measure("amplitude_pct", s.amplitude)))
				if !s.stays {
					fs = append(fs, f("AIC-204", detect.SustainedOscillation, detect.Cleared, hour(s.day)+60))
				}
			}
			r.hear(append(fs, retune("AIC-204", hour(c.changed)))...)
			if c.outcome.At != 0 {
				all, err := r.desk.Sessions(0)
				if err != nil || len(all) != 1 {
					t.Fatalf("sessions: %+v, %v", all, err)
				}
				if err := r.desk.Conclude(all[0], c.outcome); err != nil {
					t.Fatal(err)
				}
			}
			r.hear(f("TIC-401", detect.FrozenPV, detect.Updated, hour(c.until)))
			r.mail.take()
			r.run(start.Add(time.Duration(c.until*24) * time.Hour))
			r.mail.take()
			r.run(start.Add(time.Duration(c.until*24+6) * time.Hour))
			got := r.mail.take()
			if len(got) != 1 {
				t.Fatalf("%d digests, want one", len(got))
			}
			text := strings.Join(strings.Fields(got[0].Text), " ")
			_, text, _ = strings.Cut(text, "Since the tuning was changed")
			text, _, _ = strings.Cut(text, "The watch itself")
			if c.want != "" && !strings.Contains(text, c.want) || c.not != "" && strings.Contains(text, c.not) {
				t.Errorf("want %q, not %q:\n%s", c.want, c.not, got[0].Text)
			}
		})
	}
}

// TestSessions: changes within a day are one session; sessions know their
// neighbours, and a further change takes away what was concluded.
func TestSessions(t *testing.T) {
	r := newRig(t)
	hour := 60.0
	r.hear(retune("AIC-204", 0), retune("AIC-204", 2*hour), retune("PIC-120", 3*hour), retune("AIC-204", 100*hour))
	all, err := r.desk.Sessions(0)
	if err != nil || len(all) != 3 {
		t.Fatalf("%+v, %v", all, err)
	}
	at := func(h float64) int64 { return ms(start.Add(time.Duration(h * float64(time.Hour)))) }
	want := []Session{{Loop: "AIC-204", First: at(0), Last: at(2), Until: at(100)}, {Loop: "AIC-204", First: at(100), Last: at(100), Since: at(2)},
		{Loop: "PIC-120", First: at(3), Last: at(3)}}
	if !slices.Equal(all, want) {
		t.Errorf("got  %+v\nwant %+v", all, want)
	}
	if err := r.desk.Conclude(all[1], Outcome{Looks: 1, At: 7, Verdict: "x", Settled: true}); err != nil {
		t.Fatal(err)
	}
	r.open() // kept over a restart
	p, err := r.desk.Past([]string{"AIC-204"}, 0)
	if h := p.Loops["AIC-204"]; err != nil || len(h.Sessions) != 2 || h.Sessions[1].Outcome.Verdict != "x" || len(h.Findings) != 3 || len(p.Newest) != 3 {
		t.Errorf("past: %+v, %v", p, err)
	}
	r.hear(retune("AIC-204", 101*hour))
	if all, err = r.desk.Sessions(0); err != nil || all[1].Last != at(101) || all[1].Outcome != (Outcome{}) {
		t.Errorf("after one more change: %+v, %v", all, err)
	}
}

// TestRemarks: what people leave written of a loop is kept, the newest hundred.
func TestRemarks(t *testing.T) {
	r := newRig(t)
	if err := r.desk.Note("AIC-204", "Jo", "  "); err == nil {
		t.Error("an empty note was taken")
	}
	if err := r.desk.Note("XIC-1", "Jo", "x"); !errors.Is(err, ErrUnknown) {
		t.Errorf("of a loop that is not there: %v", err)
	}
	for i := range mostNotes + 2 {
		if err := r.desk.Note("AIC-204", "Jo", fmt.Sprintf("reset 42 to %d s", i)); err != nil {
			t.Fatal(err)
		}
	}
	p, err := r.desk.Past([]string{"AIC-204"}, 0)
	if h := p.Loops["AIC-204"]; err != nil || len(h.Notes) != mostNotes || h.Notes[0].Text != "reset 42 to 2 s" || h.Notes[mostNotes-1].Text != "reset 42 to 101 s" || h.Notes[0].Who != "Jo" {
		t.Errorf("%d notes, %+v, %v", len(h.Notes), h.Notes, err)
	}
}

// Remarks follow a loop to its new name; those of a loop that is listed no more go
// when nothing else is kept for as long.
func TestRemarksOfLoopsThatLeave(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Keep = 40 * 24 * time.Hour })
	r.hear(retune("AIC-204", 0))
	for _, l := range []string{"AIC-204", "PIC-120", "TIC-401"} {
		if err := r.desk.Note(l, "Jo", "as left"); err != nil {
			t.Fatal(err)
		}
	}
	r.set.Loops = []*configs.Loop{loop("AIC-904", func(l *configs.Loop) { l.Was = "AIC-204" }), loop("TIC-401")}
	r.open()
	if err := r.desk.Note("AIC-904", "Jo", "greased"); err != nil {
		t.Fatal(err)
	}
	later := start.Add(50 * 24 * time.Hour)
	r.hear(f("TIC-401", detect.SustainedOffset, detect.Raised, 50*24*60))
	r.run(later)
	p, err := r.desk.Past([]string{"AIC-904", "PIC-120", "TIC-401"}, 0)
	if err != nil {
		t.Fatal(err)
	}
	if h := p.Loops["AIC-904"]; len(h.Notes) != 2 || h.Notes[0].Text != "as left" || h.Notes[1].Text != "greased" {
		t.Errorf("under the new name: %+v", h)
	}
	if n := len(p.Loops["TIC-401"].Notes); n != 1 {
		t.Errorf("a loop that is listed has %d notes", n)
	}
	if n := len(p.Loops["PIC-120"].Notes); n != 0 {
		t.Errorf("a loop that left the list has %d notes after %s", n, r.set.Keep)
	}
}
