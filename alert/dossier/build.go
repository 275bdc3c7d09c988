package dossier

import (
	"cmp"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// ErrNoFrames says that the span holds nothing of the loop.
var ErrNoFrames = errors.New("no frame of the loop in the span; hint: midwatch status says since when it is watched, --from and --to choose a span")

func (in *Input) zone() *time.Location {
	if in.Zone != nil {
		return in.Zone
	}
	return time.UTC
}

func (in *Input) at(ms int64) time.Time { return time.UnixMilli(ms).In(in.zone()) }

// Build makes the dossier of a loop. An error is of reading the frames, or
// [ErrNoFrames]; all that cannot be computed is said in the dossier itself.
func Build(in Input) (*Dossier, error) {
	l := in.Loop
	var frames []collector.Frame
	for f, err := range in.Frames {
		if err != nil {
			return nil, fmt.Errorf("frames of loop %s: %w", l.Name, err)
		}
		if in.From > 0 && f.Time < in.From || in.To > 0 && f.Time >= in.To {
			continue
		}
		frames = append(frames, f)
	}
	if len(frames) == 0 {
		return nil, ErrNoFrames
	}
	s := newSeries(l, frames)
	if s.good == 0 {
		return nil, fmt.Errorf("loop %s: %d frames, none with PV and SP; hint: see its tags with midwatch check --connect", l.Name, len(frames))
	}
	w := look(&in, frames)
	findings := in.Findings
	if findings == nil {
		findings = w.findings
	}
	first, last := frames[0].Time, frames[len(frames)-1].Time
	eps := episodes(l.Name, findings, first, last)
	ev := s.events()
	outer := l.Inner != ""
	for _, p := range in.Partners {
		outer = outer || p.Relation == "inner"
	}
	d := &Dossier{Form: Form, Loop: l.Name, Service: l.Service, Area: l.Area, Site: in.Site, Source: in.Source,
		Cautions: Cautions, zone: in.zone(), loop: l, frames: frames, s: s, Episodes: []Episode{}, Cycles: []Cycle{}, Changes: []Change{},
		AsLeft: in.AsLeft, BlindSpots: w.view.BlindSpots, Readings: w.readings}
	if !in.Made.IsZero() {
		d.Made = detect.FormatTime(in.Made.UnixMilli())
	}
	d.Span = s.spanOf(first, last)
	d.Identity = identity(l)
	for _, p := range in.Partners {
		p.Recovery = none("not known")
		if p.RecoveryS > 0 {
			p.Recovery = number(p.RecoveryS, "s")
		}
		d.Partners = append(d.Partners, p)
	}
	d.Episodes = append(d.Episodes, eps...)
	d.Cycles = append(d.Cycles, s.cycles(w, eps)...)
	ev = s.outsideCycles(ev, d.Cycles)
	s.duringCycles(ev, d.Cycles)
	d.Outside = s.outside(&in, d.Cycles, ev, outer)
	d.Recoveries, d.Conduct = s.recoveries(ev), s.conduct(l)
	d.Element, d.ByHand = s.element(l, eps, d.Cycles), byHand(l, eps)
	cs := changes(l, frames, eps, w.readings)
	d.Tuning, d.Scheduled = s.tuning(&in, w, cs, eps), s.scheduled(w)
	var others []Candidate
	d.Process, d.fitted = s.process(l, ev)
	d.Advice, others = s.advise(&in, d.fitted, w, ev, d.Cycles)
	for i, c := range cs {
		a, b := first, last
		if i > 0 {
			a = cs[i-1].at
		}
		if i+1 < len(cs) {
			b = cs[i+1].at
		}
		x := s.compare(c.at, a, b, d.Cycles)
		x.Before, x.After = c.before, c.after
		d.Changes = append(d.Changes, x)
	}
	d.Appendix = s.appendix(&in, d.Cycles, others)
	d.Summary = d.summary()
	return d, nil
}

func (s *series) spanOf(first, last int64) Span {
	sp := Span{From: detect.FormatTime(first), To: detect.FormatTime(last), Days: float64(last-first) / 86400e3, Frames: s.frames,
		Sample: number(s.dt, "s"), Complete: counted(100*float64(s.good)/float64(s.n()), s.n(), "%"), Gaps: s.gaps, Longest: none("no gap of five samples or more")}
	if s.longest > 0 {
		sp.Longest = number(s.longest, "s")
	}
	if s.loop.Report == configs.Exception {
		sp.Notes = append(sp.Notes, "Reported by exception: values stand until they change; noise and resolution are those of the reporting.")
	}
	if s.thinned > 0 {
		sp.Notes = append(sp.Notes, fmt.Sprintf("%d frames follow frames that were thinned out: fast movement is missing there.", s.thinned))
	}
	if s.lost > 0 {
		sp.Notes = append(sp.Notes, fmt.Sprintf("%d frames follow lost samples.", s.lost))
	}
	if s.dropped > 0 {
		sp.Notes = append(sp.Notes, fmt.Sprintf("%d frames could not be placed on the grid.", s.dropped))
	}
	if !s.known {
		sp.Notes = append(sp.Notes, "No mode in the data: the law is taken as acting unless OP stands still.")
	}
	return sp
}

// weight orders episodes by how much they say of the loop: open before over, its
// own before a group's, a named cause before none, sure before unsure.
func (e Episode) weight() float64 {
	w := e.Confidence
	if e.Cleared == "" {
		w += 4
	}
	if e.Kind != detect.SharedOscillation {
		w += 2
	}
	if e.Cause != detect.NoCause && e.Cause != detect.Undetermined {
		w++
	}
	return w
}

// summary is the dossier in a few sentences, in the order in which a
// practitioner asks: measurement, final element, outside, tuning.
func (d *Dossier) summary() []Line {
	var out []Line
	add := func(about, text string) { out = append(out, Line{about, text}) }
	if n := len(d.Episodes); n == 0 {
		add("seen", "The watch found nothing in the span.")
	} else {
		e := slices.MaxFunc(d.Episodes, func(a, b Episode) int { return cmp.Compare(a.weight(), b.weight()) })
		text := e.Text
		if text == "" {
			text = strings.ReplaceAll(string(e.Kind), "-", " ") + "."
		}
		if e.Cleared != "" {
			text += " It is over."
		}
		if n > 1 {
			text += fmt.Sprintf(" %d episodes in all.", n)
		}
		add("seen", text)
	}
	stick := false
	for _, f := range d.Element {
		if f.Key == "stick_band_pct" && f.Number != nil {
			stick = true
			add("final element", "Apparent sticking or dead band, from OP and PV: "+f.Number.String()+". The final element comes before the tuning.")
		}
	}
	if !stick {
		text := "Nothing in OP and PV speaks against them; that is no test of either."
		for _, e := range d.Episodes {
			for _, c := range append([]detect.Cause{e.Cause}, e.Also...) {
				switch c {
				case detect.ValveSticking, detect.ValveDeadBand, detect.FinalElementNotFollowing, detect.MeasurementCause:
					text = "The watch holds it possible that they are at fault (" + strings.ReplaceAll(string(c), "-", " ") + "); no band can be read from OP and PV. Check by hand, see 3."
				}
			}
		}
		add("measurement and final element", text)
	}
	for _, f := range d.Outside {
		if f.Key == "same_period" && f.Note != "" {
			add("outside", "Other loops swing with the same period: "+f.Text+".")
		}
		if f.Key == "manual_spell" && strings.Contains(f.Text, "went on") {
			add("outside", "The cycle went on in a natural manual spell: it comes from outside this loop.")
		}
	}
	for _, f := range d.Tuning {
		switch f.Key {
		case "tags":
			add("tuning in service", f.Text+", by its tags.")
		case "faceplate":
			add("tuning in service", f.Text+", as read from the data.")
		}
	}
	if d.Process.Verdict.Good {
		add("process", "A model good enough to tune from: "+d.fitted.result.Model.String()+" ("+d.Process.Verdict.Why+").")
	} else {
		add("process", "No model good enough to tune from: "+d.Process.Verdict.Why+".")
	}
	if c := d.Advice.InService; c != nil {
		text := "On that model the tuning in service has Ms " + c.Ms.String() + " (wanted 1.4 to 1.7)."
		if !c.Stable {
			text = "On that model the tuning in service does not hold."
		}
		add("tuning", text)
	}
	for _, c := range d.Changes {
		at, err := time.Parse(time.RFC3339Nano, c.At)
		if err != nil { // made by this package: cannot be
			continue
		}
		add("change", at.In(d.zone).Format("2 Jan 15:04")+": "+c.Verdict+".")
	}
	return out
}
