package dossier

import (
	"errors"
	"fmt"
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
	w := look(l, in.Detect, frames)
	findings := in.Findings
	if findings == nil {
		findings = w.findings
	}
	first, last := frames[0].Time, frames[len(frames)-1].Time
	w.kept = keptReadings(in.Kept, last)
	eps := episodes(l.Name, findings, first, last)
	ev := s.events()
	outer := l.Inner != ""
	for _, p := range in.Partners {
		outer = outer || p.Relation == "inner"
	}
	d := &Dossier{Form: Form, Loop: l.Name, Service: l.Service, Area: l.Area, Site: in.Site, Source: in.Source,
		Cautions: Cautions, zone: in.zone(), loop: l, frames: frames, s: s, Episodes: []Episode{}, Cycles: []Cycle{}, Changes: []Change{},
		AsLeft: in.AsLeft, BlindSpots: w.view.BlindSpots, Readings: w.readings, Kept: w.kept}
	if !in.Made.IsZero() {
		d.Made = detect.FormatTime(in.Made.UnixMilli())
	}
	d.Span = s.spanOf(first, last)
	d.now, d.known = inService(l, w)
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
	retuned := 0 // slot
	if n := len(cs); n > 0 {
		retuned = s.slot(cs[n-1].at)
	}
	d.Identity = append(d.Identity, s.structure(l, d.now, d.known, retuned)...)
	d.Tuning, d.Scheduled = s.tuning(&in, w, cs), s.scheduled(w)
	var others []Candidate
	d.Process, d.fitted = s.process(l, ev)
	d.Element = append(d.Element, s.playFact(d.fitted, ev))
	d.Advice, others = s.advise(&in, d.fitted, w, ev, d.Cycles)
	for i, c := range cs {
		a, b := first, last
		if i > 0 {
			a = cs[i-1].at
		}
		if i+1 < len(cs) {
			b = cs[i+1].at
		}
		x := s.compare(c.at, c.at, a, b, d.Cycles)
		x.Before, x.After, x.Watch = c.before, c.after, in.told(c.at)
		d.Changes = append(d.Changes, x)
	}
	for _, n := range in.Notes {
		d.Notes = append(d.Notes, Note{detect.FormatTime(n.Wall), n.Who, n.Text})
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
