package page

import (
	"context"
	"encoding/csv"
	"encoding/json"
	"errors"
	"iter"
	"math"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// counting counts what is read of the window.
type counting struct {
	*fakeHouse
	frames int
}

func (c *counting) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		for f, err := range c.fakeHouse.Frames(ctx, loop, from, to) {
			c.frames++
			if !yield(f, err) {
				return
			}
		}
	}
}

func TestStripsReadOnce(t *testing.T) {
	h := newFake()
	h.frozen = true
	c := &counting{fakeHouse: h}
	var s strips
	hours := func(l *configs.Loop, n int64) ([]bucket, error) {
		end := h.base.UnixMilli()
		return s.between(t.Context(), c, l, h.base, end-n*3600*1000, end)
	}
	l := h.find("AIC-204").Loop
	b, err := hours(l, 12)
	if err != nil {
		t.Fatal(err)
	}
	if len(b) != 240 || c.frames < 24*1800-100 || c.frames > 24*1800+100 {
		t.Fatalf("%d buckets from %d frames, want 240 from a day", len(b), c.frames)
	}
	// Every bucket holds the least and the greatest of its frames.
	end := h.base.UnixMilli() / bucketMs
	low, high := math.Inf(1), math.Inf(-1)
	for f := range h.Frames(t.Context(), "AIC-204", (end-3)*bucketMs, (end-2)*bucketMs) {
		low, high = min(low, float64(f.PV)/2*100), max(high, float64(f.PV)/2*100)
	}
	x := b[len(b)-4]
	if math.Abs(widenPV(x.low)-low) > 0.005 || math.Abs(widenPV(x.high)-high) > 0.005 || x.saw != sawData {
		t.Errorf("bucket %v to %v (%b), want %v to %v", widenPV(x.low), widenPV(x.high), x.saw, low, high)
	}
	c.frames = 0
	if _, err := hours(l, 12); err != nil || c.frames != 0 {
		t.Errorf("a second look read %d frames, %v", c.frames, err)
	}
	h.base = h.base.Add(9 * time.Minute)
	b2, err := hours(l, 12)
	if err != nil || c.frames != 270 {
		t.Errorf("nine minutes on, %d frames were read, want 270; %v", c.frames, err)
	}
	if n := len(b) - 4; b2[n-3] != b[n] {
		t.Errorf("what was seen moved by other than three buckets: %v and %v", b2[n-3], b[n])
	}
	h.base = h.base.Add(30 * time.Hour)
	if b, err = hours(l, 24); err != nil || len(b) != ringBuckets || b[0].saw&sawData == 0 {
		t.Errorf("after a day nobody looked: %d buckets, first %v, %v", len(b), b[0], err)
	}
	other := *l
	other.PVHigh = 4
	c.frames = 0
	if _, err := hours(&other, 12); err != nil || c.frames < 40000 {
		t.Errorf("another range is read anew: %d frames, %v", c.frames, err)
	}
}

// failing cannot read the trend of one loop.
type failing struct{ *fakeHouse }

func (f failing) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	if loop == "AIC-204" {
		return func(yield func(collector.Frame, error) bool) {
			yield(collector.Frame{}, errors.New("slice is damaged; hint: see the log"))
		}
	}
	return f.fakeHouse.Frames(ctx, loop, from, to)
}

func TestOneTrendThatCannotBeRead(t *testing.T) {
	h := newFake()
	h.frozen = true
	p, err := New(Options{House: failing{h}, Page: configs.Page{Listen: "127.0.0.1:0"}, Clock: h.clock})
	if err != nil {
		t.Fatal(err)
	}
	code, body := got(t, p, "/")
	if code != 200 || !strings.Contains(body, "its trend cannot be read") || !strings.Contains(body, "growing since 01:12") || strings.Count(body, `class="strip`) != len(h.loops) {
		t.Errorf("answer %d: the list stands, and says what is missing", code)
	}
	if code, body := got(t, p, "/loops/AIC-204"); code != 500 || !strings.Contains(body, "Slice is damaged") || !strings.Contains(body, "See the log") {
		t.Errorf("the loop itself: answer %d", code)
	}
}

func TestTrace(t *testing.T) {
	d := func(pct float64) bucket { return bucket{squeezePV(pct), squeezePV(pct), sawData} }
	for _, c := range []struct {
		name string
		b    []bucket
		want string
	}{
		{"nothing", []bucket{{}, {}}, ""},
		{"flat", []bucket{d(50), d(50)}, "M0 30l 1 0 0 0-1 0z"},
		{"a gap", []bucket{d(50), {}, d(50)}, "M0 30l 0 0zM2 30l 0 0z"},
		{"up", []bucket{d(48), d(52)}, "M0 58l 1-56 0 0-1 56z"},
	} {
		if got := trace(c.b); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

func TestTrendKeepsExtremes(t *testing.T) {
	h := newFake()
	h.frozen = true
	const spike = 37 * 60
	h.add("PIC-999", "", "", "bar", 0, 100, 1000, detect.Judged, "", func(s float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		switch {
		case s == -spike:
			return 91, 50, 3, collector.Auto, 0
		case s == -spike-1:
			return 7, 50, 97, collector.Auto, 0
		case s > -900 && s < -600:
			return math.NaN(), 50, 50, collector.Auto, collector.Gap
		case s > -400 && s < -300:
			return 50, 50, 50, collector.Manual, 0
		}
		return 50 + n(), 50, 50, collector.Auto, 0
	})
	to := h.base.UnixMilli()
	tr, err := readTrend(t.Context(), h, h.find("PIC-999").Loop, to-3600*1000, to, 60)
	if err != nil {
		t.Fatal(err)
	}
	low, high, nulls := float32(50), float32(50), 0
	for i, v := range tr.PV {
		if v != v {
			nulls++
			continue
		}
		low, high = min(low, v), max(high, v)
		if i > 0 && tr.Times[i] <= tr.Times[i-1] {
			t.Fatalf("times do not grow at %d", i)
		}
	}
	if low != 7 || high != 91 {
		t.Errorf("PV from %v to %v, want 7 to 91", low, high)
	}
	if nulls == 0 || tr.Frames != 3600 || len(tr.Times) > 500 || tr.BucketMs != 60000 {
		t.Errorf("%d nulls, %d frames, %d rows, buckets of %d ms", nulls, tr.Frames, len(tr.Times), tr.BucketMs)
	}
	whats := map[string]run{}
	for _, r := range tr.Runs {
		whats[r.What] = r
	}
	if r := whats["gap"]; r.From != to-899000 || r.To != to-600000 {
		t.Errorf("gap %+v", r)
	}
	if r := whats["inactive"]; r.Word != "in manual" || r.From != to-399000 {
		t.Errorf("manual %+v", r)
	}
	if len(tr.Changes) != 2 || tr.Changes[0].Word != "mode manual" {
		t.Errorf("changes %+v", tr.Changes)
	}
	b, err := json.Marshal(tr)
	if err != nil || !json.Valid(b) || !strings.Contains(string(b), "null") {
		t.Errorf("as JSON: %v", err)
	}
}

func TestOverlays(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	names := func(path string) map[string]overlay {
		w := call(t, p.gate.next, "GET", path, "")
		// Columns are written only; here they are read as plain numbers.
		var raw struct {
			Overlays []struct {
				Name      string
				T         []int64
				Low, High []*float32
			}
		}
		if err := json.Unmarshal(w.Body.Bytes(), &raw); err != nil {
			t.Fatal(err)
		}
		out := map[string]overlay{}
		for _, o := range raw.Overlays {
			x := overlay{Name: o.Name, Times: o.T}
			for _, v := range o.Low {
				if v != nil {
					x.Low = append(x.Low, *v)
				}
			}
			for _, v := range o.High {
				x.High = append(x.High, *v)
			}
			out[o.Name] = x
		}
		return out
	}
	o := names("/api/loops/AIC-204/trend?hours=4")
	env := o["envelope"]
	if n := len(env.High); n != 18 || env.High[n-1]-env.High[0] < 0.05 || math.Abs(float64(env.High[n-1]+env.Low[n-1])/2-1) > 0.001 {
		t.Errorf("envelope of %d points grows about SP", len(env.High))
	}
	if hc := o["half-cycles"]; len(hc.Times) != 20 || math.Abs(float64(hc.Low[19]-hc.Low[18])) < 0.15 {
		t.Errorf("half-cycles %v: want the 20 that the watch holds, at their peaks", hc.Low)
	}
	off := names("/api/loops/AIC-212/trend?hours=12")["offset"]
	if n := len(off.Low); n < 10 || math.Abs(float64(off.Low[n/2])-6.65) > 0.01 {
		t.Errorf("offset line of %d points lies where PV stayed", n)
	}
	if d := names("/api/loops/LIC-310/trend?hours=12")["recoveries"]; len(d.Low) < 10 || math.Abs(float64(d.Low[0])-4.9) > 0.05 || math.Abs(float64(d.Low[len(d.Low)-1])-3.668) > 0.05 {
		t.Errorf("recoveries: %d points, from 4.9 to 3.67 m: %v", len(d.Low), d.Low)
	}
}

func TestWindUpOverhang(t *testing.T) {
	h := newFake()
	h.frozen = true
	l := h.add("LIC-9", "", "", "", 0, 100, 1000, detect.Judged, "", func(s float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		pv := 50.0
		if s > -600 {
			pv = 40 // reverse action: OP goes up
		}
		if s > -300 {
			pv = 60 // the error has changed sign, and OP stays at its limit
		}
		op := 50.0
		if s > -500 && s < -100 {
			op = 100
		}
		return pv, 50, op, collector.Auto, 0
	})
	to := h.base.UnixMilli()
	tr, err := readTrend(t.Context(), h, l, to-3600*1000, to, 600)
	if err != nil {
		t.Fatal(err)
	}
	var limit, over run
	for _, r := range tr.Runs {
		switch r.What {
		case "limit":
			limit = r
		case "overhang":
			over = r
		}
	}
	if limit.From != to-499000 || over.From != to-299000 || over.To != to-100000 {
		t.Errorf("limit %+v, overhang %+v", limit, over)
	}
}

func TestTrendCSV(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	w := call(t, p.gate.next, "GET", "/loops/AIC-204/trend.csv?hours=1", "")
	rows, err := csv.NewReader(w.Body).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) != 1801 || strings.Join(rows[0], ",") != "time,loop,pv,sp,op,mode,flags" || rows[1][1] != "AIC-204" || rows[1][5] != "auto" {
		t.Errorf("%d rows, %v, %v", len(rows), rows[0], rows[1])
	}
	if _, err := time.Parse(time.RFC3339Nano, rows[1][0]); err != nil {
		t.Error(err)
	}
}

// Position and feed-forward are there where the loop has tags for them, and
// nowhere else.
func TestPositionAndFeedforward(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	var x struct{ OP, Pos, FF []*float32 }
	if err := json.Unmarshal(call(t, p.gate.next, "GET", "/api/loops/FIC-118/trend?hours=12&points=200", "").Body.Bytes(), &x); err != nil {
		t.Fatal(err)
	}
	if len(x.Pos) != len(x.OP) || len(x.FF) != len(x.OP) || len(x.Pos) < 300 {
		t.Fatalf("%d values of OP, %d of position, %d of feed-forward", len(x.OP), len(x.Pos), len(x.FF))
	}
	least, most := *x.Pos[len(x.Pos)-1], *x.Pos[len(x.Pos)-1]
	for _, v := range x.Pos[len(x.Pos)-20:] {
		least, most = min(least, *v), max(most, *v)
	}
	if most-least < 1.5 {
		t.Errorf("the position is seen to move by %g %%, want its whole stroke of 1.6 %%", most-least)
	}
	for path, want := range map[string]bool{"/loops/FIC-118": true, "/loops/PIC-101": false} {
		w := call(t, p.gate.next, "GET", path+"/trend.svg?hours=1", "").Body.String()
		if strings.Contains(w, "position (grey)") != want || strings.Contains(w, `class="ff"`) != want {
			t.Errorf("%s: drawn in the picture, want %v", path, want)
		}
		if code, body := got(t, p, path); code != 200 || strings.Contains(body, "<dt>position</dt>") != want {
			t.Errorf("%s: %d; position among the facts, want %v", path, code, want)
		}
		w = call(t, p.gate.next, "GET", path+"/trend.csv?hours=1", "").Body.String()
		if head, _, _ := strings.Cut(w, "\n"); strings.Contains(head, "position") != want {
			t.Errorf("%s: columns %s", path, head)
		}
	}
}
