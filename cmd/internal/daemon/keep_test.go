package daemon

import (
	"log/slog"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
)

// Frames are kept whole for the longest of full, thin and evidence.
func TestKeepsForTheLongestPromise(t *testing.T) {
	const hour = time.Hour
	for _, c := range []struct {
		name                 string
		full, thin, evidence time.Duration
	}{
		{"full", 9 * hour, 0, 1 * hour},
		{"thin", 1 * hour, 9 * hour, 1 * hour},
		{"evidence", 1 * hour, 1 * hour, 9 * hour},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t, manyLoops(1))
			r.config.Keep.Full, r.config.Keep.Thin, r.config.Keep.Evidence = c.full, c.thin, c.evidence
			r.config.Keep.Flush = 3 * hour // two flushes are a slice, and all are made here
			r.start()
			defer r.stop()
			for _, second := range []int{0, 1, 2, 3, 7 * 3600, 7*3600 + 1, 7*3600 + 2} {
				r.put("works", epoch.Add(time.Duration(second+1)*time.Second), manySamples(1, second))
				if err := r.d.window.Flush(t.Context()); err != nil {
					t.Fatal(err)
				}
			}
			oldest := func() int64 { return r.d.window.Stats().Oldest }
			first := oldest()
			if first == 0 || first > epoch.Add(hour).UnixMilli() {
				t.Fatalf("the first frames are not there: oldest %d", first)
			}
			r.d.keeper.expire(epoch.Add(8 * hour))
			if oldest() != first {
				t.Error("frames went before the longest promise was over")
			}
			r.d.keeper.expire(epoch.Add(10 * hour))
			if oldest() == first {
				t.Error("frames outlive every promise")
			}
		})
	}
}

// A keep.size that does not hold the trends of keep.full is told, once a day.
func TestSizeTooSmallIsTold(t *testing.T) {
	r := newRig(t, manyLoops(1))
	r.config.Keep.Size, r.config.Keep.Flush = 1<<20, 10*time.Hour // the window is written here
	var log journal
	o := r.options()
	o.Logger = slog.New(slog.NewTextHandler(&log, nil))
	d, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	r.d = d
	if err := d.Start(); err != nil {
		t.Fatal(err)
	}
	defer r.stop()
	<-d.CaughtUp()
	rnd := rand.New(rand.NewPCG(5, 6))
	at := epoch
	hour := func() {
		for range 36 { // as noise does not pack, about 14 bytes a frame
			for range 1000 {
				at = at.Add(100 * time.Millisecond)
				d.window.Append(0, collector.Frame{Time: at.UnixMilli(), PV: rnd.Float32(), SP: rnd.Float32(), OP: rnd.Float32(), Mode: collector.Auto})
			}
			if err := d.window.Flush(t.Context()); err != nil {
				t.Fatal(err)
			}
		}
		d.keeper.noteRoom(at)
	}
	told := func() int { return strings.Count(log.String(), "keep.size does not hold") }
	if hour(); told() != 0 {
		t.Errorf("told with room to spare:\n%s", &log)
	}
	for range 5 {
		hour()
	}
	if told() != 1 || !strings.Contains(log.String(), "full=14d") {
		t.Errorf("told %d times, want once; oldest %d, %d bytes\n%s", told(), d.window.Stats().Oldest, d.window.Stats().Bytes, &log)
	}
	at = at.Add(24 * time.Hour)
	if hour(); told() != 2 {
		t.Errorf("told %d times a day later, want twice", told())
	}
}
