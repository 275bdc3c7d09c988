package detect_test

import (
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// A value every two hours is a slow source: that it is later than half an hour is said
// twice and not each time; that it stays away for half a day is said.
func TestSlowSourceIsKnown(t *testing.T) {
	l := configs.NewLoop("PIC-482")
	l.PVLow, l.PVHigh, l.SilenceS = 0, 10, 1800
	nan := collector.NaN32
	var fs []collector.Frame
	at := func(s, since int) { // seconds, of them since the last value
		f := collector.Frame{Time: int64(s) * 1000, PV: 5, SP: 5, OP: 50, Feedforward: nan, Position: nan, Mode: collector.Auto}
		switch {
		case since >= 1800:
			f.PV, f.Flags = nan, collector.Gap
		case since > 0:
			f.Flags = collector.Held | collector.Unconfirmed
		}
		fs = append(fs, f)
	}
	const every = 7300
	n := 0
	for ; n < 50*every; n += 50 {
		at(n, n%every)
	}
	said := func() (times int) {
		for _, f := range replay(l, fs) {
			if f.Kind == detect.StaleData && f.Event == detect.Raised {
				times++
			}
		}
		return
	}
	if k := said(); k > 2 {
		t.Errorf("a slow source is told %d times", k)
	}
	for ; n < 56*every; n += 50 {
		at(n, every)
	}
	if k := said(); k != 3 {
		t.Errorf("half a day of silence: told %d times", k)
	}
}
