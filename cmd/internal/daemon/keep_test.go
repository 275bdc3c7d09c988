package daemon

import (
	"log/slog"
	"strings"
	"testing"
	"time"
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

// A keep.size that does not hold the trends of keep.full is told.
func TestSizeTooSmallIsTold(t *testing.T) {
	const n = 100
	r := newRig(t, manyLoops(n))
	r.config.Keep.Size = 1 << 20
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
	for second := 0; second < 3*3600+20; second += 10 {
		batch := manySamples(n, second)
		for k := 1; k < 10; k++ {
			batch = append(batch, manySamples(n, second+k)...)
		}
		r.put("works", epoch.Add(time.Duration(second+10)*time.Second), batch)
	}
	r.until("it is told", func() bool { return strings.Contains(log.String(), "keep.size does not hold") })
	if said := log.String(); strings.Count(said, "keep.size does not hold") != 1 || !strings.Contains(said, "full=14d") {
		t.Errorf("the log says:\n%s", said)
	}
}
