package page

import (
	"context"
	"fmt"
	"io"
	"iter"
	"math"
	"slices"
	"strings"
	"sync"
	"time"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// fakeHouse is Kestrel Fen on a night in January: data as functions of time,
// episodes as the desk would hold them. Its clock starts at 02:44 and runs.
type fakeHouse struct {
	mu      sync.Mutex
	base    time.Time
	start   time.Time
	used    map[string]bool
	frozen  bool // the clock stands, for pictures
	loops   []LoopState
	signal  map[string]signal
	eps     []alert.Episode
	journal map[string][]alert.Entry
	urgent  map[string]alert.Urgency
	shelves []alert.Shelf
	notes   map[string][]alert.Remark
	rev     uint64
	down    bool // a source is down
	acts    []string
}

// signal gives PV, SP, OP and mode at t seconds before now (t <= 0).
type signal struct {
	stepMs int64
	at     func(t float64, n func() float64) (pv, sp, op float64, mode collector.Mode, flags collector.Flags)
}

var london = func() *time.Location {
	z, err := time.LoadLocation("Europe/London")
	if err != nil {
		panic(err)
	}
	return z
}()

const fakeHour = 3600.0

// noiseAt is noise that is the same each time it is asked for.
func noiseAt(seed uint64) func() float64 {
	return func() float64 {
		s := 0.0
		for range 3 {
			seed += 0x9e3779b97f4a7c15
			z := seed
			z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
			z = (z ^ z>>27) * 0x94d049bb133111eb
			s += float64((z^z>>31)>>11) / (1 << 53)
		}
		return (s - 1.5) * 2
	}
}

func newFake() *fakeHouse {
	h := &fakeHouse{base: time.Date(2026, 1, 6, 2, 44, 0, 0, london), start: time.Now(), signal: map[string]signal{}, journal: map[string][]alert.Entry{}, urgent: map[string]alert.Urgency{}}
	h.kestrelFen()
	return h
}

func (h *fakeHouse) clock() time.Time {
	if h.frozen {
		return h.base
	}
	return h.base.Add(time.Since(h.start))
}

func (h *fakeHouse) ms(hoursAgo float64) int64 {
	return h.base.UnixMilli() - int64(hoursAgo*fakeHour*1000)
}

func (h *fakeHouse) add(name, service, area, unit string, low, high float64, step int64, state detect.State, why string, f func(t float64, n func() float64) (pv, sp, op float64, mode collector.Mode, flags collector.Flags)) *configs.Loop {
	l := configs.NewLoop(name)
	l.Service, l.Area, l.Unit, l.PVLow, l.PVHigh, l.PVRangeGiven, l.Source = service, area, unit, low, high, true, "works"
	l.Action, l.GainPct, l.IdealReset = configs.Reverse, 1, 240
	h.loops = append(h.loops, LoopState{Loop: l, State: state, Why: why})
	h.signal[name] = signal{step, f}
	return l
}

// quiet is a loop with nothing to see.
func quiet(sp, noise, op float64) func(float64, func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
	return func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		return sp + noise*n(), sp, op + noise*n() + 2*math.Sin(t/9000), collector.Auto, 0
	}
}

func (h *fakeHouse) episode(loop string, u alert.Urgency, f detect.Finding, hoursAgo, overHoursAgo float64) *alert.Episode {
	f.Subject, f.Loop = detect.Subject{Loop: loop}, loop
	f.Event, f.Since, f.At = detect.Raised, h.ms(hoursAgo), h.ms(max(0, hoursAgo-0.4))
	open := overHoursAgo < 0
	e := alert.Episode{ID: fmt.Sprintf("20260106-%04d-kfen", len(h.eps)+1), Subject: f.Subject, Family: string(f.Kind), Since: f.Since, First: f.At, Raised: f.At, Last: f.At, Count: 1}
	if !open {
		f.Event, f.At, f.Reason = detect.Cleared, h.ms(overHoursAgo), detect.Over
		e.Cleared, e.Last = f.At, f.At
	}
	e.Members = []alert.Member{{Finding: f, Open: open}}
	h.eps = append(h.eps, e)
	h.urgent[e.ID] = u
	h.journal[e.ID] = []alert.Entry{{Episode: e.ID, Number: 1, At: f.At, Wall: e.Raised + 20000, What: "raised", State: alert.Unacknowledged, Finding: &f},
		{Episode: e.ID, Number: 2, Wall: e.Raised + 50000, What: "told to on-call by mail", State: alert.Unacknowledged}}
	return &h.eps[len(h.eps)-1]
}

func (h *fakeHouse) kestrelFen() {
	m := func(kv ...any) (out detect.Measures) {
		for i := 0; i < len(kv); i += 2 {
			out = append(out, detect.Measure{Name: kv[i].(string), Value: kv[i+1].(float64)})
		}
		return
	}
	l := h.add("AIC-204", "chlorine residual", "contact tank", "mg/l", 0, 2, 2000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		a := 0.0
		if t > -1.53*fakeHour {
			a = 0.086 * math.Pow(1.16, t/372)
		}
		sp := 1.0
		if t < -8.6*fakeHour {
			sp = 0.95
		}
		w := 2 * math.Pi * t / 372
		return sp + a*math.Sin(w) + 0.004*n(), sp, 44 + a*430*math.Sin(w-1.15-math.Pi/2) + 0.4*n() + 2*math.Sin(t/9000), collector.Auto, 0
	})
	l.OPLimitHigh, l.PVAlarmHigh, l.PVAlarmLow = 85, 1.5, 0.5
	f := detect.Finding{Kind: detect.GrowingOscillation, Cause: detect.ResetTooShort, Confidence: 0.93, AlsoPossible: []detect.Cause{detect.GainTooHigh},
		Changed:   []detect.Change{{What: detect.ChangedTuning, At: h.ms(1.7), Text: "reset time from about 4 min to 24.6 s"}},
		Measures:  m("period_s", 372.0, "growth_per_cycle", 1.16, "amplitude_pct", 4.0, "amplitude_pv", 0.08, "gain", 1.02, "reset_s", 24.6, "pi_lag_deg", 66.0, "time_to_op_limit_s", 5340.0),
		Text:      "For 89 min PV has been swinging ±0.08 mg/l with a cycle of 6.2 min, about 1.2 times larger each cycle (reset in service about 25 s); OP meets a limit in about 89 min. The reset time is too short for this process, likely. What changed before: reset time from about 4 min to 24.6 s, 10 min before. First check the measurement and the final element, then the reset time. Direction: a longer reset time.",
		TextShort: "AIC-204: growing swing ±0.08 mg/l, cycle 6.2 min, for 89 min, OP limit in 89 min; likely the reset time is too short for this process. Advisory only."}
	e0 := h.episode("AIC-204", alert.Now, f, 1.53, -1)
	e0.Members[0].Finding.At = h.ms(0.05)
	h.add("LIC-310", "clear-well level", "clear well", "m", 0, 6, 5000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		u := math.Mod(t+1e7*2.2*fakeHour, 2.2*fakeHour) / fakeHour
		e := 1.4 * math.Exp(-u*2.6)
		return 3.5 + e + 0.01*n(), 3.5, 50 - 14*e + 0.2*n(), collector.Auto, 0
	})
	h.episode("LIC-310", alert.Morning, detect.Finding{Kind: detect.SluggishRecovery, Cause: detect.ResetTooLong, Confidence: 0.85, Measures: m("recovery_s", 3120.0, "usual_s", 720.0, "reset_s", 1080.0),
		Text: "For 24 min PV has been creeping back after disturbances: it takes about 52 min where 12 min was usual. The reset time is too long for this process, likely. First check the measurement and that the final element moves freely, then the reset time. Direction: a shorter reset time."}, 31, -1)
	saw := func(amp, lag float64) func(float64, func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		return func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
			if t < -5.7*fakeHour {
				return 120 + 0.5*n(), 120, 47 + 0.1*n(), collector.Auto, 0
			}
			u := math.Mod(t-lag+1e6*42, 42) / 42
			sq, tri := 1.0, 4*u-1
			if u > 0.5 {
				sq, tri = -1, 3-4*u
			}
			return 120 + amp*sq + 0.8*n(), 120, 47 + 0.8*tri, collector.Auto, 0
		}
	}
	h.add("FIC-118", "filter 3 outlet flow", "filters", "m³/h", 0, 250, 1000, detect.Judged, "", saw(6, 0)).Position = "FIC-118.ZT"
	h.add("PIC-107", "booster header pressure", "boosters", "bar", 0, 250, 1000, detect.Judged, "", saw(2.5, 6))
	h.add("FIC-119", "filter 4 outlet flow", "filters", "m³/h", 0, 250, 1000, detect.Judged, "", saw(1.8, 14))
	h.episode("FIC-118", alert.Morning, detect.Finding{Kind: detect.ValveStickingKind, Cause: detect.ValveSticking, Confidence: 0.9, Measures: m("period_s", 42.0, "amplitude_pct", 2.4, "amplitude_pv", 6.0, "op_swing_pct", 1.6),
		Text: "For 24 min PV has been cycling ±6 m³/h every 42 s while OP ramps to and fro by about 1.6 % before PV answers: apparent sticking, from OP and PV. The final element sticks, likely. No change of mode or SP was seen in the 24 h before. First stroke the final element when operations agree; compare stem with OP."}, 5.7, -1)
	g := h.episode("PIC-107", alert.Morning, detect.Finding{Kind: detect.SharedOscillation, Cause: detect.ValveSticking, Confidence: 0.7, Loops: []string{"FIC-118", "PIC-107", "FIC-119"}, Measures: m("period_s", 42.0, "loops", 3.0),
		Text: "For 24 min 3 loops have been cycling together every 42 s: FIC-118, PIC-107, FIC-119; widest in FIC-118, ±6 m³/h. Candidate root: FIC-118, whose output looks like that of a sticking final element. First stroke it when operations agree, before anything at the other loops."}, 5.2, -1)
	g.Group = []string{"FIC-118", "PIC-107", "FIC-119"}
	h.add("TIC-221", "digester 1 temperature", "digesters", "°C", 20, 60, 5000, detect.Judged, "", quiet(36, 0.1, 41))
	h.episode("TIC-221", alert.Note, detect.Finding{Kind: detect.TuningChanged, Confidence: 0.95, Measures: m("reset_s", 1200.0, "reset_before_s", 720.0), Text: "The tuning in service changed 24 min ago: reset time from about 12 min to 20 min. Nothing to do if it was meant."}, 3.57, -1)
	h.add("AIC-212", "coagulation pH", "coagulation", "pH", 4, 10, 5000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		off := 0.0
		if t > -9.6*fakeHour && t < -6.5*fakeHour {
			off = 0.15
		}
		return 6.8 - off + 0.02*n(), 6.8, 38 + 0.4*n() - 20*off, collector.Auto, 0
	})
	h.episode("AIC-212", alert.Note, detect.Finding{Kind: detect.SustainedOffset, Cause: detect.OutsideDisturbance, Confidence: 0.6, Measures: m("offset_pct", 2.5, "offset_pv", 0.15, "duration_s", 11160.0), Text: "PV is back at its set point."}, 9.6, 6.5)
	h.add("FIC-131", "backwash flow", "filters", "m³/h", 0, 400, 5000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		if t > -7.8*fakeHour && t < -4.57*fakeHour {
			return 160 + n(), 180, 33, collector.Manual, 0
		}
		return 180 + 2*n(), 180, 40 + 0.5*n(), collector.Auto, 0
	})
	h.add("LIC-305", "filter 3 level", "filters", "m", 0, 4, 5000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		if t > -2.4*fakeHour && t < -1.65*fakeHour {
			return math.NaN(), math.NaN(), math.NaN(), collector.ModeUnknown, collector.Gap
		}
		return 2.2 + 0.012*n(), 2.2, 52 + 0.3*n(), collector.Auto, 0
	})
	h.add("AIC-230", "fluoride residual", "contact tank", "mg/l", 0, 2, 300000, detect.CannotJudge, "sampled every 5 min, too slowly for a reset time of 4 min", quiet(0.7, 0.01, 30))
	h.add("PIC-101", "high-lift pressure", "high lift", "bar", 0, 16, 5000, detect.Judged, "", quiet(7.2, 0.02, 61))
	h.add("FIC-102", "raw water inlet flow", "intake", "m³/h", 0, 900, 5000, detect.Judged, "", quiet(410, 3, 55))
	h.add("TIC-224", "digester 2 temperature", "digesters", "°C", 20, 60, 5000, detect.NotNormal, "in manual", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		return 35 + 0.1*n(), 36, 40, collector.Manual, 0
	})
	h.add("FIC-140", "alum dosing flow", "coagulation", "l/h", 0, 200, 5000, detect.HeldState, "cannot be seen while the law does not act", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		if t > -0.6*fakeHour {
			return 92 + n(), 100, 61, collector.Manual, 0
		}
		return 92 + n(), 100, 100, collector.Auto, 0
	})
	e := h.episode("FIC-140", alert.Morning, detect.Finding{Kind: detect.OutputSaturation, Cause: detect.OutputLimit, Confidence: 0.9, Measures: m("offset_pct", 4.0, "offset_pv", 8.0, "op_pct", 100.0, "duration_s", 1440.0), Text: "OP lies at its limit (100 %) for 24 min while PV is 8 l/h below its set point. OP has no room left, likely. First check the measurement, then the final element, then whether the demand is beyond it."}, 3.1, -1)
	e.Hold = &alert.Hold{Since: h.ms(0.6), Why: "manual"}
	o := h.add("AIC-201", "chlorine after contact", "contact tank", "mg/l", 0, 2, 5000, detect.Judged, "", quiet(1.1, 0.01, 50))
	o.Inner = "FIC-202"
	h.add("FIC-202", "hypochlorite flow", "contact tank", "l/h", 0, 50, 5000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		return 20 + 3*math.Sin(t/1900) + 0.2*n(), 20 + 3*math.Sin(t/1850), 50 + 5*math.Sin(t/1900), collector.Cascade, 0
	})
	h.add("LIC-301", "balance tank level", "intake", "m", 0, 5, 5000, detect.Judged, "", func(t float64, n func() float64) (float64, float64, float64, collector.Mode, collector.Flags) {
		return 2.5 + 0.5*math.Sin(t/6000) + 0.01*n(), 2.5, 50 - 10*math.Sin(t/6000), collector.Auto, 0
	})
}

// hostile adds loops whose names and units try to do harm.
func (h *fakeHouse) hostile() {
	for i, x := range [][2]string{{"<script>window.harmed=1</script>", "<img src=x onerror=window.harmed=1>"}, {"لوب-٢٠٤ \u202eABC", "ضبط الكلور"}, {"\"'><svg onload=window.harmed=1>", "javascript:window.harmed=1"},
		{"A/B?c=d#e%2F&f", "path in a name"}, {"W" + fmt.Sprintf("%060d", 7) + "WWW", "a service text that goes on and on and on, over the whole of the works and back again, and does not stop where it should have stopped"}, {"=cmd|' /C calc'!A0", "formula"}, {"..", "dots"}, {"PLC1:FIC-7", "a colon in a name"}} {
		l := h.add(x[0], x[1], "<b>area</b>", "<u>unit</u>", 0, 100, 5000, detect.Judged, "", quiet(50, 0.5, 50))
		_ = l
		if i < 3 {
			h.episode(x[0], alert.Now, detect.Finding{Kind: detect.GrowingOscillation, Cause: detect.GainTooHigh, Confidence: 0.9, Text: x[0] + " swings " + x[1]}, 2, -1)
		}
	}
}

// many adds n quiet loops.
func (h *fakeHouse) many(n int) {
	areas := []string{"intake", "coagulation", "filters", "contact tank", "clear well", "boosters", "digesters"}
	for i := range n {
		kind := []string{"FIC", "LIC", "PIC", "TIC", "AIC"}[i%5]
		st, why := detect.Judged, ""
		if i%17 == 5 {
			st, why = detect.CannotJudge, "not disturbed yet: recovery cannot be judged"
		}
		h.add(fmt.Sprintf("%s-%d", kind, 1000+i), fmt.Sprintf("train %d %s", i/40+1, areas[i%len(areas)]), areas[i%len(areas)], "%", 0, 100, 30000, st, why, quiet(50, 0.4, 50))
	}
}

func (h *fakeHouse) Site() configs.Site {
	return configs.Site{Name: "Kestrel Fen", TimeZone: "Europe/London", Zone: london}
}

func (h *fakeHouse) Summary() Summary {
	h.mu.Lock()
	defer h.mu.Unlock()
	s := Summary{Newest: h.clock().UnixMilli() - 2000, Sources: 3, Alive: 3, Revision: h.rev}
	for i := range h.loops {
		switch h.loops[i].State {
		case detect.Judged:
			s.Judged++
		case detect.NotNormal:
			s.NotNormal++
		case detect.HeldState:
			s.Held++
		default:
			s.CannotJudge++
		}
	}
	if h.down {
		s.Alive, s.Newest = 2, s.Newest-14*60*1000
	}
	return s
}

func (h *fakeHouse) Watch() WatchState {
	now := h.clock().UnixMilli()
	w := WatchState{Version: "0.0.0-test", Started: now - 9*86400000, Rate: 812.4,
		Sources: []collector.SourceState{
			{Name: "works", Kind: "opcua", Link: "watching", Since: now - 3*86400000, LastData: now - 900, LagMs: 640, ClockOffsetMs: 120, CertDays: 3100, ServerCertDays: 212, Counts: map[string]uint64{"values": 91822331, "dropped": 0, "gaps": 4}},
			{Name: "gateway", Kind: "mqtt", Link: "watching", Since: now - 5*3600000, LastData: now - 2100, LagMs: 1210, ClockOffsetMs: 3600400, Counts: map[string]uint64{"values": 5512031, "duplicates": 12}},
			{Name: "digesters", Kind: "opcua", Link: "watching", Since: now - 86400000, LastData: now - 1500, LagMs: 900, Refused: []collector.RefusedTag{{Loop: "TIC-229", Address: "nsu=urn:kestrel-fen:plant;s=TIC-229.PV", Why: "the server does not know this node"}}}},
		Parts:   []Part{{"ledger", now - 800, "well", true}, {"flush", now - 6000, "well", true}, {"shard 0", now - 900, "well", true}},
		Store:   StoreState{Bytes: 8123456789, Limit: 20e9, DiskFree: 71e9, LastFlush: now - 6000},
		Senders: []SenderState{{"hook", "webhook", 0, 0, now - 4000000, ""}, {"mail", "mail", 2, now - 700000, now - 90000000, "the relay refuses: 421 try later"}}, Clock: ClockState{Steps: 1, LastStep: now - 26*3600000}}
	if h.down {
		w.Sources[1].Link, w.Sources[1].Since, w.Sources[1].Problem, w.Sources[1].Hint = "down", now-14*60000, "connection refused by 10.1.0.6:8883", "see whether the broker runs"
	}
	return w
}

func (h *fakeHouse) Loops() []LoopState { return slices.Clone(h.loops) }

func (h *fakeHouse) find(name string) *LoopState {
	for i := range h.loops {
		if h.loops[i].Loop.Name == name {
			return &h.loops[i]
		}
	}
	return nil
}

func (h *fakeHouse) View(loop string) (detect.View, bool) {
	s := h.find(loop)
	if s == nil {
		return detect.View{}, false
	}
	v := detect.View{State: s.State, Why: s.Why, SampleS: float64(h.signal[loop].stepMs) / 1000, NoisePV: s.Loop.PVSpan() * 0.002, TimeScaleS: 720, PeriodS: math.NaN(), GainPct: 1.02, GainLow: 0.97, GainHigh: 1.07, ResetS: 236, ResetLow: 222, ResetHigh: 251}
	if loop == "AIC-204" {
		v.PeriodS, v.ResetS, v.ResetLow, v.ResetHigh = 372, 24.6, 23.4, 25.9
	}
	if loop == "FIC-118" {
		v.LagS, v.Schedule = 4.2, []detect.GainPoint{{PV: 30, Gain: 0.8, N: 5}, {PV: 70, Gain: 1.6, N: 1}}
	}
	if s.State == detect.CannotJudge {
		v.BlindSpots = []string{s.Why}
	}
	now := h.clock().UnixMilli()
	for f := range h.Frames(context.Background(), loop, now-2*h.signal[loop].stepMs, now+1) {
		v.Last = f
	}
	return v, true
}

func (h *fakeHouse) Explain(loop string) ([]string, error) {
	if h.find(loop) == nil {
		return nil, ErrUnknownLoop
	}
	return []string{"sample interval 2 s; noise level 0.004 mg/l (0.200 % of range)", "tuning in service: gain 1.02 (0.97 to 1.07), reset 24.6 s (23.4 to 25.9)", "live oscillation since 2026-01-06T01:12:00.000Z: period 6.2 min, lag of the controller 66 degrees (asked of a reset too short over 45, of a gain too high under 35)"}, nil
}

func (h *fakeHouse) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		s, ok := h.signal[loop]
		if !ok {
			return
		}
		end := min(to, h.clock().UnixMilli())
		base := h.base.UnixMilli()
		from = max(from, base-14*86400000)
		for t := (from + s.stepMs - 1) / s.stepMs * s.stepMs; t < end; t += s.stepMs {
			if t%(1000*s.stepMs) == 0 && ctx.Err() != nil {
				yield(collector.Frame{}, ctx.Err())
				return
			}
			pv, sp, op, mode, flags := s.at(float64(t-base)/1000, noiseAt(uint64(t)+uint64(len(loop))*77))
			f := collector.Frame{Time: t, PV: collector.Clean32(pv), SP: collector.Clean32(sp), OP: collector.Clean32(op), Mode: mode, Flags: flags, Feedforward: collector.NaN32, Position: collector.NaN32}
			if l := h.find(loop).Loop; l.Position != "" {
				f.Position = float32(math.Round(op/0.8) * 0.8) // a stem that moves in steps
				f.Feedforward = collector.Clean32(20 + 4*math.Sin(float64(t-base)/3e6))
			}
			if !yield(f, nil) {
				return
			}
		}
	}
}

func (h *fakeHouse) Settings(w io.Writer) error {
	_, err := io.WriteString(w, "site:\n  name: Kestrel Fen                       # midwatch.yaml:1\n  time_zone: Europe/London                # midwatch.yaml:1\nsources:\n  - name: works\n    opcua:\n      endpoint: opc.tcp://10.1.0.5:4840\n      password_file: opcua.pass           # midwatch.yaml:7, content not shown\n")
	return err
}

func (h *fakeHouse) Episodes() []alert.Episode {
	h.mu.Lock()
	defer h.mu.Unlock()
	out := slices.Clone(h.eps)
	slices.SortStableFunc(out, func(a, b alert.Episode) int {
		if a.Open() != b.Open() {
			return boolOrder(b.Open(), a.Open())
		}
		return urgencyOrder(h.urgent[a.ID]) - urgencyOrder(h.urgent[b.ID])
	})
	return out
}

func (h *fakeHouse) Episode(id string) (alert.Episode, []alert.Entry, error) {
	h.mu.Lock()
	defer h.mu.Unlock()
	for _, e := range h.eps {
		if e.ID == id {
			return e, slices.Clone(h.journal[id]), nil
		}
	}
	return alert.Episode{}, nil, fmt.Errorf("episode %q is %w", id, alert.ErrUnknown)
}

func (h *fakeHouse) Past(loops []string, _ int64) (alert.Past, error) {
	h.mu.Lock()
	defer h.mu.Unlock()
	p := alert.Past{Loops: map[string]alert.History{}}
	for _, e := range h.eps {
		for _, m := range e.Members {
			p.Newest = append(p.Newest, m.Finding)
		}
		for _, l := range e.Loops() {
			x := p.Loops[l]
			for _, j := range h.journal[e.ID] {
				if j.Finding != nil {
					x.Findings = append(x.Findings, *j.Finding)
				}
			}
			p.Loops[l] = x
		}
	}
	for _, l := range loops {
		x := p.Loops[l]
		x.Notes = []alert.Remark{{Wall: h.ms(30), Who: "Jo", Text: "reset 42 to 60 s, valve greased"}}
		p.Loops[l] = x
	}
	return p, nil
}

func (h *fakeHouse) Urgency(e *alert.Episode) (alert.Urgency, string) {
	u := h.urgent[e.ID]
	why := map[alert.Urgency]string{alert.Now: "OP meets its limit before the morning", alert.Morning: "it lasts, and nothing is reached before the morning", alert.Note: "nothing to do tonight"}[u]
	return u, why
}

func (h *fakeHouse) Acknowledge(id, who, why string, until time.Time) error {
	h.mu.Lock()
	defer h.mu.Unlock()
	for i := range h.eps {
		if h.eps[i].ID == id {
			h.eps[i].Ack = &alert.Mark{Who: who, Why: why, Wall: h.clock().UnixMilli()}
			h.journal[id] = append(h.journal[id], alert.Entry{Episode: id, Wall: h.clock().UnixMilli(), What: "acknowledged", Who: who, Why: why})
			h.rev++
			h.acts = append(h.acts, "acknowledge "+who)
			return nil
		}
	}
	return fmt.Errorf("episode %q is %w; hint: look at the list", id, alert.ErrUnknown)
}

// Links of the fake are "good-" and the number of an episode.
func (h *fakeHouse) Linked(token string) (alert.Episode, error) {
	id, ok := strings.CutPrefix(token, "good-")
	if !ok || h.used[token] {
		return alert.Episode{}, fmt.Errorf("%w: it was not made here; hint: acknowledge on the page", alert.ErrLink)
	}
	e, _, err := h.Episode(id)
	return e, err
}

func (h *fakeHouse) AcknowledgeByLink(token, who, why string) error {
	if _, err := h.Linked(token); err != nil {
		return err
	}
	if h.used == nil {
		h.used = map[string]bool{}
	}
	h.used[token] = true
	return h.Acknowledge(strings.TrimPrefix(token, "good-"), who, why, time.Time{})
}

func (h *fakeHouse) Shelve(loop, who, why string, until time.Time) error {
	h.mu.Lock()
	defer h.mu.Unlock()
	if why == "" {
		return fmt.Errorf("no reason given; hint: say why the loop is shelved")
	}
	m := alert.Mark{Who: who, Why: why, Until: until.UnixMilli()}
	h.shelves = append(h.shelves, alert.Shelf{Loop: loop, Mark: m})
	for i := range h.eps {
		if h.eps[i].Subject.Loop == loop {
			h.eps[i].Shelf = &m
		}
	}
	h.rev++
	h.acts = append(h.acts, "shelve "+loop)
	return nil
}

func (h *fakeHouse) Unshelve(loop, who, why string) error {
	h.mu.Lock()
	defer h.mu.Unlock()
	h.shelves = slices.DeleteFunc(h.shelves, func(s alert.Shelf) bool { return s.Loop == loop })
	for i := range h.eps {
		if h.eps[i].Subject.Loop == loop {
			h.eps[i].Shelf = nil
		}
	}
	h.rev++
	return nil
}

func (h *fakeHouse) Shelves() []alert.Shelf {
	h.mu.Lock()
	defer h.mu.Unlock()
	return slices.Clone(h.shelves)
}
