package alert

import (
	"slices"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"pgregory.net/rapid"

	"midwatch/configs"
	"midwatch/detect"
)

// TestLifeCycle drives one loop through everything that can happen to it, and
// compares with a model of the states.
func TestLifeCycle(t *testing.T) {
	rapid.Check(t, func(rt *rapid.T) {
		r := newRig(t)
		defer r.desk.Stop()
		minute := 0.0
		open, exists, acked, shelved, why := false, false, false, false, ""
		entries := map[string]uint32{}
		for range rapid.IntRange(1, 30).Draw(rt, "steps") {
			minute += float64(rapid.IntRange(1, 300).Draw(rt, "minutes"))
			now := start.Add(time.Duration(minute) * time.Minute)
			r.clock.set(now)
			act := rapid.SampledFrom([]string{"raise", "update", "clear", "ack", "shelve", "unshelve", "hide", "suppress", "oos", "see", "restart", "wake"}).Draw(rt, "act")
			switch act {
			case "raise", "update":
				ev := detect.Raised
				if act == "update" {
					ev = detect.Updated
				}
				r.hear(f("AIC-204", detect.SustainedOffset, ev, minute))
				if !open {
					acked = false
				}
				open, exists = true, true
			case "clear":
				r.hear(f("AIC-204", detect.SustainedOffset, detect.Cleared, minute))
				open = false
			case "ack":
				if exists {
					if err := r.desk.Acknowledge(r.newest(), "Jo", "", time.Time{}); err != nil {
						rt.Fatal(err)
					}
					acked = true
				}
			case "shelve":
				if err := r.desk.Shelve("AIC-204", "Jo", "repair", now.Add(13*24*time.Hour)); err != nil {
					rt.Fatal(err)
				}
				shelved = true
			case "unshelve":
				if err := r.desk.Unshelve("AIC-204", "Jo", ""); (err == nil) != shelved {
					rt.Fatal(err)
				}
				shelved = false
			case "hide", "suppress", "oos", "see":
				why = map[string]string{"hide": "manual", "suppress": WhySuppressed, "oos": WhyOutOfService, "see": ""}[act]
				if err := r.desk.Visible(Sight{"AIC-204", ms(now), why}); err != nil {
					rt.Fatal(err)
				}
			case "restart":
				r.open()
			case "wake":
				r.run(now)
			}
			if !exists {
				continue
			}
			want := Unacknowledged
			switch {
			case !open && acked:
				want = Normal
			case open && why == WhyOutOfService:
				want = OutOfService
			case open && why == WhySuppressed:
				want = SuppressedByDesign
			case shelved:
				want = Shelved
			case !open:
				want = ReturnedToNormal
			case why != "":
				want = Held
			case acked:
				want = Acknowledged
			}
			e, js, err := r.desk.Episode(r.newest())
			if err != nil {
				rt.Fatal(err)
			}
			if e.State() != want {
				rt.Fatalf("after %s: %q, want %q", act, e.State(), want)
			}
			if uint32(len(js)) != e.Entries || e.Entries < entries[e.ID] {
				rt.Fatalf("the journal lost lines: %d of %d", len(js), e.Entries)
			}
			entries[e.ID] = e.Entries
		}
	})
}

// newest is the id of the episode of the loop that was raised last.
func (r *rig) newest() string {
	es := r.desk.Episodes()
	slices.SortFunc(es, func(a, b Episode) int { return int(b.Raised - a.Raised) })
	return es[0].ID
}

// TestRun: in virtual time, the desk wakes itself when something is due.
func TestRun(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		s := newStore()
		hook := &fakeSender{}
		var tries atomic.Int32
		began := time.Now()
		hook.answer = func(Message) error {
			if tries.Add(1) == 1 {
				return &RetryAfter{After: 3 * time.Minute, Reason: ReasonServer, Err: errDisk}
			}
			return nil
		}
		d, err := New(Options{Store: On(s), Clock: time.Now, Seed: 7, Settings: Settings{Site: "Kestrel Fen", Standing: -1, Senders: map[string]Sender{"hook": hook},
			Advise: configs.Advise{Senders: []configs.Sender{{Name: "hook", Webhook: &configs.Webhook{}}}, Routes: []configs.Route{{To: []string{"hook"}}}}}})
		if err != nil {
			t.Fatal(err)
		}
		done := make(chan struct{})
		go func() { defer close(done); d.Run(t.Context(), time.After) }()
		x := urgent("AIC-204", 0)
		x.At = began.UnixMilli()
		x.Since = x.At
		if err := d.Hear([]detect.Finding{x}); err != nil {
			t.Fatal(err)
		}
		time.Sleep(30*time.Second - time.Millisecond)
		synctest.Wait()
		if tries.Load() != 0 {
			t.Fatal("told before it had settled")
		}
		time.Sleep(2 * time.Millisecond)
		synctest.Wait()
		if tries.Load() != 1 {
			t.Fatalf("%d attempts after it settled, want 1", tries.Load())
		}
		time.Sleep(3*time.Minute - 10*time.Millisecond)
		synctest.Wait()
		if tries.Load() != 1 {
			t.Fatal("tried again before the other side wished")
		}
		time.Sleep(20 * time.Millisecond)
		synctest.Wait()
		if got := hook.take(); len(got) != 1 {
			t.Fatalf("%d messages, want 1 at the time the other side named", len(got))
		}
		d.Stop()
	})
}
