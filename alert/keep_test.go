package alert

import (
	"errors"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

const aDay = 24 * time.Hour

// later makes the newest data time of the desk that of after.
func (r *rig) later(after time.Duration) {
	r.t.Helper()
	r.hear(f("TIC-401", detect.SluggishRecovery, detect.Updated, after.Minutes()))
}

// TestOldEpisodesGo: what ended long ago leaves the store with all that hangs on
// it; what somebody may still ask for stays.
func TestOldEpisodesGo(t *testing.T) {
	r := newRig(t, func(s *Settings) {
		s.Keep = 100 * aDay
		s.Advise.Digest.Daily = "07:00"
		s.Advise.Digest.To = []string{"hook"}
	})
	r.run(start)
	over := f("AIC-204", detect.SustainedOffset, detect.Raised, 0)
	open := f("PIC-120", detect.SustainedOffset, detect.Raised, 0)
	unread := urgent("FIC-311", 0)
	r.hear(over, open, unread, f("AIC-204", detect.TuningChanged, detect.Raised, 1))
	r.run(start.Add(time.Minute))
	ids := map[string]string{}
	for _, e := range r.desk.Episodes() {
		ids[e.Subject.Loop+" "+e.Family] = e.ID
	}
	for _, x := range []*detect.Finding{&over, &unread} {
		x.Event, x.At = detect.Cleared, ms(start)+3600_000
	}
	r.hear(over, unread)
	r.run(start.Add(2 * time.Hour))
	// The digest of the next day takes along what waits.
	r.run(start.Add(aDay))
	there := func(what string) bool {
		_, js, err := r.desk.Episode(ids[what])
		if err != nil && !errors.Is(err, ErrUnknown) {
			t.Fatal(err)
		}
		if (err == nil) != (len(js) > 0) {
			t.Errorf("%s: an episode without its journal, or a journal without its episode", what)
		}
		return err == nil
	}
	check := func(after time.Duration, want map[string]bool) {
		t.Helper()
		r.run(start.Add(after))
		for what, w := range want {
			if got := there(what); got != w {
				t.Errorf("after %s: %s there %v, want %v", after, what, got, w)
			}
		}
	}
	r.later(99 * aDay)
	check(99*aDay, map[string]bool{"AIC-204 limit": true, "AIC-204 tuning": true, "FIC-311 swing": true, "PIC-120 limit": true})
	// One of both clocks alone, however far ahead, costs nothing.
	check(1000*aDay, map[string]bool{"AIC-204 limit": true})
	r.clock.set(start.Add(99 * aDay))
	r.later(2000 * aDay)
	check(99*aDay+time.Hour, map[string]bool{"AIC-204 limit": true})
	told := r.store.count(bucketTold)
	check(102*aDay, map[string]bool{"AIC-204 limit": false, "AIC-204 tuning": false, "FIC-311 swing": true, "PIC-120 limit": true})
	if now := r.store.count(bucketTold); now >= told {
		t.Errorf("%d told-records before, %d after", told, now)
	}
	for k := range r.store.data {
		for _, what := range []string{"AIC-204 limit", "AIC-204 tuning"} {
			if strings.Contains(k, ids[what]) {
				t.Errorf("left over: %q", k)
			}
		}
	}
	// What woke somebody goes once it was acknowledged, as long after.
	if err := r.desk.Acknowledge(ids["FIC-311 swing"], "Jo", "seen late", time.Time{}); err != nil {
		t.Fatal(err)
	}
	check(103*aDay+time.Hour, map[string]bool{"FIC-311 swing": true})
	check(203*aDay, map[string]bool{"FIC-311 swing": false, "PIC-120 limit": true})
	r.open()
	check(210*aDay, map[string]bool{"AIC-204 limit": false, "FIC-311 swing": false, "PIC-120 limit": true})
	// An old finding given again does not come to life with the store.
	r.hear(f("PIC-120", detect.SustainedOffset, detect.Raised, 0))
	if n := len(r.desk.Episodes()); n != 2 {
		t.Errorf("%d episodes, want PIC-120 and TIC-401", n)
	}
}

// TestPruningSparesWhatIsOnItsWay: a message that could still be sent, or sent
// again, keeps its episode and what was told of it.
func TestPruningSparesWhatIsOnItsWay(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Keep = 30 * aDay })
	fail := true
	r.hook.answer = func(Message) error {
		if fail {
			return &Failure{ReasonRefused, errDisk}
		}
		return nil
	}
	x := f("AIC-204", detect.SustainedOffset, detect.Raised, 0)
	r.hear(x)
	id := r.desk.Episodes()[0].ID
	if _, err := r.desk.Wake(start); err != nil {
		t.Fatal(err)
	}
	r.desk.settle()
	x.Event, x.At = detect.Cleared, x.At+60_000
	r.hear(x)
	r.later(50 * aDay)
	r.desk.o.GiveUp = 365 * aDay
	wake := func(at time.Time) {
		t.Helper()
		r.clock.set(at)
		if _, err := r.desk.Wake(at); err != nil {
			t.Fatal(err)
		}
		r.desk.settle()
	}
	wake(start.Add(50 * aDay))
	wake(start.Add(52 * aDay))
	if _, _, err := r.desk.Episode(id); err != nil {
		t.Fatal("pruned with messages on their way:", err)
	}
	fail = false
	for i := range 60 {
		wake(start.Add(52*aDay + time.Duration(i)*time.Hour))
	}
	if _, _, err := r.desk.Episode(id); err != nil {
		// The person's notes wait for a digest that this site does not have; they
		// are dropped with the episode.
		if n := r.store.count(bucketOutbox); n != 0 {
			t.Errorf("%d messages left", n)
		}
	} else {
		t.Error("still there when all was told")
	}
	if got := r.hook.take(); len(got) != 3 {
		t.Errorf("%d messages, want raised, over and the other loop", len(got))
	}
}

// TestPruningThatFails: nothing goes in part.
func TestPruningThatFails(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Keep = 30 * aDay; s.Advise.Routes = s.Advise.Routes[:1] })
	x := f("AIC-204", detect.SustainedOffset, detect.Raised, 0)
	r.hear(x)
	id := r.desk.Episodes()[0].ID
	x.Event, x.At = detect.Cleared, x.At+60_000
	r.hear(x)
	r.run(start)
	r.later(50 * aDay)
	r.run(start.Add(20 * aDay))
	journal := r.store.count(bucketJournal)
	r.clock.set(start.Add(50 * aDay))
	r.store.fail = func(int, bool) error { return errDisk }
	if _, err := r.desk.Wake(start.Add(50 * aDay)); err == nil {
		t.Fatal("no error from a store that does not write")
	}
	r.store.fail = nil
	if _, _, err := r.desk.Episode(id); err != nil || r.store.count(bucketJournal) != journal {
		t.Fatal("half of it went", err)
	}
	r.run(start.Add(50*aDay + time.Minute))
	if _, _, err := r.desk.Episode(id); !errors.Is(err, ErrUnknown) {
		t.Errorf("%v, want it gone once the store writes again", err)
	}
}

// TestPruningOnceADay: in virtual time, the desk does it by itself, in one
// transaction a day.
func TestPruningOnceADay(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		s := newStore()
		d, err := New(Options{Store: On(s), Clock: time.Now, Settle: -1, SettleStale: -1, SettleSwing: -1, Settings: Settings{Site: "Kestrel Fen", Standing: -1, Keep: 40 * aDay,
			Senders: map[string]Sender{"log": &fakeSender{}},
			Advise:  configs.Advise{Senders: []configs.Sender{{Name: "log", Log: &configs.LogSender{}}}, Routes: []configs.Route{{To: []string{"log"}}}}}})
		if err != nil {
			t.Fatal(err)
		}
		go d.Run(t.Context(), time.After)
		say := func(loop string, e detect.Event) {
			x := f(loop, detect.SustainedOffset, e, 0)
			x.At = time.Now().UnixMilli()
			x.Since = x.At
			if err := d.Hear([]detect.Finding{x}); err != nil {
				t.Fatal(err)
			}
		}
		say("AIC-204", detect.Raised)
		time.Sleep(time.Minute)
		say("AIC-204", detect.Cleared)
		time.Sleep(39 * aDay)
		say("PIC-120", detect.Raised)
		time.Sleep(time.Hour)
		synctest.Wait()
		if n := s.count(bucketEpisodes); n != 2 {
			t.Fatalf("%d episodes, want 2 before the time is over", n)
		}
		time.Sleep(3 * aDay)
		say("PIC-120", detect.Updated)
		synctest.Wait()
		before := s.written()
		time.Sleep(4 * aDay)
		synctest.Wait()
		if n := s.count(bucketEpisodes); n != 1 {
			t.Errorf("%d episodes, want the open one", n)
		}
		if n := s.written() - before; n > 6 {
			t.Errorf("%d transactions in four quiet days, want about one a day", n)
		}
		d.Stop()
	})
}
