package alert

import (
	"path/filepath"
	"testing"
	"time"

	"midwatch/detect"
	"midwatch/store"
)

// TestOnTheStore: the desk on the store it lives on, closed and opened again.
func TestOnTheStore(t *testing.T) {
	path := filepath.Join(t.TempDir(), "state.db")
	r := newRig(t)
	use := func(f func(d *Desk)) {
		t.Helper()
		s, err := store.OpenState(path)
		if err != nil {
			t.Fatal(err)
		}
		d, err := New(Options{Store: On(s), Settings: r.set, Clock: r.clock.now, Settle: -1, SettleStale: -1, SettleSwing: -1})
		if err != nil {
			t.Fatal(err)
		}
		f(d)
		d.Stop()
		if err := s.Close(); err != nil {
			t.Fatal(err)
		}
	}
	use(func(d *Desk) {
		if err := d.Hear([]detect.Finding{f("AIC-204", detect.SustainedOffset, detect.Raised, 0), f("PIC-120", detect.GrowingOscillation, detect.Raised, 0)}); err != nil {
			t.Fatal(err)
		}
		if err := d.Acknowledge("nothing", "Jo", "", time.Time{}); err == nil {
			t.Fatal("an episode that is not there was acknowledged")
		}
	})
	use(func(d *Desk) {
		for range 3 {
			if _, err := d.Wake(start); err != nil {
				t.Fatal(err)
			}
			d.settle()
		}
	})
	use(func(d *Desk) {
		if _, err := d.Wake(start); err != nil {
			t.Fatal(err)
		}
		d.settle()
		es := d.Episodes()
		if len(es) != 2 {
			t.Fatalf("%d episodes, want 2", len(es))
		}
		_, js, err := d.Episode(es[0].ID)
		if err != nil || len(js) != 2 {
			t.Errorf("journal %+v, %v; want raised and told", js, err)
		}
	})
	if n := len(r.hook.take()); n != 2 {
		t.Errorf("%d messages, want 2", n)
	}
}

func BenchmarkHearOnTheStore(b *testing.B) {
	s, err := store.OpenState(filepath.Join(b.TempDir(), "state.db"))
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	r := newRig(b)
	d, err := New(Options{Store: On(s), Settings: r.set, Clock: r.clock.now})
	if err != nil {
		b.Fatal(err)
	}
	defer d.Stop()
	i := 0.0
	for b.Loop() {
		i++
		if err := d.Hear([]detect.Finding{f("AIC-204", detect.SustainedOffset, detect.Updated, i)}); err != nil {
			b.Fatal(err)
		}
	}
}
