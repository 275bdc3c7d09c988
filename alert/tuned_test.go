package alert

import (
	"strings"
	"testing"
	"time"

	"midwatch/detect"
)

func retune(loop string, minute float64) detect.Finding {
	return f(loop, detect.TuningChanged, detect.Raised, minute, func(x *detect.Finding) { x.Since = x.At })
}

// TestOneMessageWhileSomebodyTunes: who asked to hear of tuning gets one message
// for an hour of it, programs every change, and others a line in the digest.
func TestOneMessageWhileSomebodyTunes(t *testing.T) {
	for _, c := range []struct {
		name  string
		loops []string
		every float64 // minutes
		n     int
		want  string
	}{
		{"one change", []string{"AIC-204"}, 1, 1, "AIC-204: tuning changed"},
		{"one loop", []string{"AIC-204"}, 4, 9, "AIC-204: 9 times: tuning changed"},
		{"three loops", []string{"AIC-204", "PIC-120", "FIC-311"}, 3, 12, "tuning changed 12 times on 3 loops"},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t, func(s *Settings) { s.Advise.Routes[1].Urgency = []string{"now", "morning", "note"} })
			r.run(start)
			for i := range c.n {
				r.hear(retune(c.loops[i%len(c.loops)], float64(i)*c.every))
				r.run(start.Add(time.Duration(float64(i) * c.every * float64(time.Minute))))
				if i == c.n/2 {
					r.open()
				}
			}
			if got := r.mail.take(); len(got) != 0 {
				t.Errorf("%d messages while the hour lasts: %s", len(got), got[0].Subject)
			}
			if got := r.hook.take(); len(got) != c.n {
				t.Errorf("%d messages to a program, want all %d", len(got), c.n)
			}
			hour := start.Add(time.Hour)
			r.clock.set(hour.Add(-time.Second))
			next, err := r.desk.Wake(hour.Add(-time.Second))
			if err != nil || next.After(hour) {
				t.Errorf("next wake %v, %v; want it at the end of the hour", next, err)
			}
			r.run(hour)
			got := r.mail.take()
			if len(got) != 1 || !strings.Contains(got[0].Subject, c.want) {
				t.Fatalf("%d messages, want one with %q: %+v", len(got), c.want, got)
			}
			r.run(start.Add(3 * time.Hour))
			if got := r.mail.take(); len(got) != 0 {
				t.Error("told again:", got[0].Subject)
			}
		})
	}
}

func TestTuningInTheDigest(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Digest.Daily = "16:00"; s.Advise.Digest.To = []string{"mail"} })
	r.run(start)
	for i := range 9 {
		r.hear(retune("AIC-204", float64(i)*4))
		r.run(start.Add(time.Duration(i) * 4 * time.Minute))
	}
	r.run(start.Add(6 * time.Hour))
	got := r.mail.take()
	if len(got) != 1 || strings.Count(got[0].Text, "tuning changed") != 1 || !strings.Contains(strings.Join(strings.Fields(got[0].Text), " "), "AIC-204: 9 times: tuning changed") {
		t.Fatalf("want one digest with one line of the nine changes: %+v", got)
	}
}

// TestTuningThroughCrashes: wherever the process ends, before or after a write, the
// hour's message arrives once, and with every loop in it.
func TestTuningThroughCrashes(t *testing.T) {
	for _, committed := range []bool{false, true} {
		for n := 1; ; n++ {
			r := newRig(t, func(s *Settings) {
				s.Advise.Routes = s.Advise.Routes[1:]
				s.Advise.Routes[0].Urgency = []string{"note"}
			})
			r.run(start)
			crash, crashed := r.store.written()+n, false
			r.store.fail = func(i int, after bool) error {
				if i == crash && after == committed {
					crashed = true
					return errDisk
				}
				return nil
			}
			// do acts, and once more after a restart where that was cut short.
			do := func(act func() error) {
				t.Helper()
				if act() != nil {
					r.open()
					if err := act(); err != nil {
						t.Fatal(err)
					}
				}
			}
			wake := func(at time.Time) {
				t.Helper()
				r.clock.set(at)
				for range 5 {
					do(func() error { _, err := r.desk.Wake(at); return err })
					r.desk.settle()
				}
			}
			for i, l := range []string{"AIC-204", "PIC-120", "AIC-204", "FIC-311"} {
				do(func() error { return r.desk.Hear([]detect.Finding{retune(l, float64(i*5))}) })
				wake(start.Add(time.Duration(i*5) * time.Minute))
			}
			wake(start.Add(time.Hour))
			wake(start.Add(time.Hour + time.Minute))
			wake(start.Add(3 * time.Hour))
			keys := map[string]int{}
			got := r.mail.take()
			for _, m := range got {
				keys[m.Key]++
			}
			if len(keys) != 1 || len(got) > 2 || !strings.Contains(got[0].Subject, "tuning changed 4 times on 3 loops") {
				t.Fatalf("write %d, committed %v: %d messages under %d keys", n, committed, len(got), len(keys))
			}
			if !crashed {
				if n < 5 {
					t.Fatalf("only %d writes", n)
				}
				break
			}
		}
	}
}
