package quality

import (
	"math"
	"runtime"
	"slices"
	"sort"
	"sync"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// Options of a bench.
type Options struct {
	Loops    int     // scenarios per fault family, and per healthy family
	Days     float64 // of a healthy loop recorded at 10 s
	Seed     uint64
	Hold     bool // the held-back space of seeds
	Match    func(family string) bool
	Nuisance float64 // handed to the watch; 0: its default
	Each     func(*Result)
}

// episode is one kind of finding about one subject, from raised to the end.
type episode struct {
	last    detect.Finding // newest raised or updated
	raised  int64
	cleared int64        // 0 while open
	named   detect.Cause // the last cause that was not undetermined
}

// Result is what was made of one scenario.
type Result struct {
	Family  string
	Index   int
	Healthy bool
	Seconds float64 // of data, all loops
	Frames  int
	EveryS  float64 // recording interval

	Found, Subtle bool
	DelayUnits    float64 // NaN when not found
	Cause         string  // "right", "wrong", "undetermined", "" (not scored or not found)
	Said          detect.Cause
	Extra         []detect.Finding // raised without being in the truth, before the onset ones included
	Early         int              // of them raised before the onset
	Named         []Claim          // what was said with a cause, for the calibration
	Findings      []detect.Finding

	HasTuning              bool // the law is a PI one that can be read
	GainTrue, ResetTrue    float64
	GainSeen, ResetSeen    float64 // of the view at the end, NaN unless given
	GainOfText, ResetInMsg float64 // of the findings, NaN unless given
}

// Claim is a named cause with its confidence.
type Claim struct {
	Confidence float64
	Right      bool
}

// Run draws, simulates and judges all scenarios on all cores. The order of the
// results is that of family and index.
func Run(o Options) []Result {
	type job struct {
		f *family
		i int
	}
	var jobs []job
	for _, fs := range [][]family{faultFamilies, healthyFamilies} {
		for i := range fs {
			f := &fs[i]
			if o.Match != nil && !o.Match(f.name) {
				continue
			}
			n := o.Loops
			if f.weight > 0 {
				n = int(math.Round(float64(n) * f.weight))
			}
			for k := range n {
				jobs = append(jobs, job{f, k})
			}
		}
	}
	out := make([]Result, len(jobs))
	var wg sync.WaitGroup
	next := make(chan int)
	var mu sync.Mutex
	for range runtime.GOMAXPROCS(0) {
		wg.Go(func() {
			for k := range next {
				out[k] = judge(jobs[k].f.make(o.Seed, o.Hold, jobs[k].i, o.Days), o.Nuisance)
				if o.Each != nil {
					mu.Lock()
					o.Each(&out[k])
					mu.Unlock()
				}
			}
		})
	}
	for k := range jobs {
		next <- k
	}
	close(next)
	wg.Wait()
	return out
}

// judge runs one scenario through the watch and scores what it says.
func judge(s *scenario, nuisance float64) Result {
	res := Result{Family: s.family.name, Index: s.index, Healthy: s.family.healthy, EveryS: s.rigs[0].rec.every,
		Seconds: s.duration * float64(len(s.rigs)), DelayUnits: math.NaN()}
	heard := newListener()
	watches := make([]*detect.Watch, len(s.rigs))
	rows := make([]*configs.Loop, len(s.rigs))
	slowest := 0.0
	for i, l := range s.rigs {
		rows[i] = l.row
		watches[i] = detect.New(l.row, collector.LoopID(i), detect.Options{NuisancePerLoopYear: nuisance})
		slowest = math.Max(slowest, l.rec.every)
	}
	sites := detect.NewSites(rows)
	slot := int64(0)
	lag := int64(slowest*2000) + 1
	s.run(func(i int, f *collector.Frame) {
		res.Frames++
		watches[i].Step(f, heard.hear)
		if ev, ok := watches[i].TakeEvidence(); ok {
			sites.Record(collector.LoopID(i), ev)
		}
		if end := (f.Time - lag) / detect.SiteSlotMs * detect.SiteSlotMs; end > slot {
			slot = end
			sites.Slot(end, heard.hear)
		}
	})
	score(s, heard, watches, &res)
	return res
}

// sameEpisodeMs: what is raised again within a day is the same episode, as on the
// desk.
const sameEpisodeMs = 86400_000

// listener keeps what was said.
type listener struct {
	all  []detect.Finding
	open map[string]*episode // the newest by subject and kind
	done []*episode          // all of them
}

func newListener() *listener { return &listener{open: map[string]*episode{}} }

func (h *listener) hear(f *detect.Finding) {
	c := *f
	h.all = append(h.all, c)
	key := c.Loop + "|" + c.Subject.Source + c.Subject.Part + "|" + string(c.Kind)
	e := h.open[key]
	switch {
	case c.Event == detect.Cleared:
		if e != nil && e.cleared == 0 {
			e.cleared = c.At
		}
		return
	case e == nil || e.cleared > 0 && c.At-e.cleared > sameEpisodeMs:
		e = &episode{raised: c.At}
		h.open[key] = e
		h.done = append(h.done, e)
	}
	e.cleared = 0
	e.last = c
	if c.Cause != detect.NoCause && c.Cause != detect.Undetermined {
		e.named = c.Cause
	}
}

// episodes gives all, in order of being raised.
func (h *listener) episodes() []*episode {
	all := append([]*episode{}, h.done...)
	sort.SliceStable(all, func(i, j int) bool {
		a, b := all[i], all[j]
		if a.raised != b.raised {
			return a.raised < b.raised
		}
		if a.last.Loop != b.last.Loop {
			return a.last.Loop < b.last.Loop
		}
		return a.last.Kind < b.last.Kind
	})
	return all
}

// aboutData says whether a kind is about the data, not the loop.
func aboutData(k detect.Kind) bool {
	switch k {
	case detect.SourceDown, detect.SourceLate, detect.SamplesLost, detect.ClockStepKind:
		return true
	}
	return false
}

func score(s *scenario, h *listener, watches []*detect.Watch, res *Result) {
	t := &s.truth
	if t.cycles && t.unit > 0 && t.member <= 0 { // the swing of a valve, of a group's root too, is known only from the run
		if l := s.rigs[0]; l.turns > 10 {
			t.unit = math.Max(2*(s.duration-t.onset)/float64(l.turns), l.pu)
		}
	}
	res.Findings = h.all
	res.Subtle = t.subtle != nil && t.subtle(s)
	scoreFindings(s, h, res)
	scoreTuning(s, h, watches, res)
}

func scoreFindings(s *scenario, h *listener, res *Result) {
	t := &s.truth
	onset, end := s.epoch+int64(t.onset*1000), s.epoch+int64(t.end*1000)
	var right, wrong, open bool
	for _, e := range h.episodes() {
		k := e.last.Kind
		if aboutData(k) || e.raised > end {
			continue
		}
		own := slices.Contains(t.kinds, k)
		member := t.member < 0 || len(s.rigs) == 1 || e.last.Loop == s.rigs[t.member].name || k == detect.SharedOscillation
		if t.early > 0 && own && e.raised < onset && e.raised >= onset-int64(t.early*1000) {
			e.raised = onset
		}
		if t.forbid != nil && e.raised >= onset && t.forbid(s, e.last.Loop, e.named) {
			f := e.last
			f.At = e.raised
			res.Extra = append(res.Extra, f)
			res.Named = append(res.Named, Claim{e.last.Confidence, false})
			if !own || !member {
				continue
			}
		}
		switch {
		case (res.Healthy || e.raised >= onset && !own) && (slices.Contains(t.also, k) || trulyClipped(s, k)):
		case res.Healthy || e.raised < onset || !own && !slices.Contains(t.also, k):
			f := e.last
			f.At = e.raised
			res.Extra = append(res.Extra, f)
			if !res.Healthy && e.raised < onset {
				res.Early++
			}
			if e.named != "" && (res.Healthy || e.raised < onset) {
				res.Named = append(res.Named, Claim{e.last.Confidence, false})
			}
		case own && member:
			if !res.Found {
				res.Found = true
				res.DelayUnits = float64(e.raised-onset) / 1000 / t.unit
			}
			if len(t.causes) == 0 {
				break
			}
			c := e.last.Cause
			switch {
			case c == detect.NoCause || c == detect.Undetermined || slices.Contains(t.soft, c):
				open = true
			case slices.Contains(t.causes, c):
				right = true
				res.Named = append(res.Named, Claim{e.last.Confidence, true})
			default:
				wrong = true
				res.Said = c
				res.Named = append(res.Named, Claim{e.last.Confidence, false})
			}
		}
	}
	switch {
	case wrong:
		res.Cause = "wrong"
	case right:
		res.Cause = "right"
	case open:
		res.Cause = "undetermined"
	}
}

// trulyClipped: OP really sat at its limit for longer than a recovery takes, or PV
// at an end of its range, so a finding about that is no false one, whatever the
// family.
func trulyClipped(s *scenario, k detect.Kind) bool {
	l := s.rigs[0]
	return l.clipLongest > 2*l.recovery && (k == detect.OutputSaturation || k == detect.SustainedOffset) ||
		l.endLongest > 60 && k == detect.PVAtRangeEnd
}

func scoreTuning(s *scenario, h *listener, watches []*detect.Watch, res *Result) {
	l := s.rigs[max(s.truth.member, 0)]
	res.GainTrue, res.ResetTrue = l.law.kc, l.law.ti
	res.HasTuning = !math.IsInf(l.law.ti, 1) && l.law.schedule == nil && l.law.gap == 0
	v := watches[max(s.truth.member, 0)].View()
	res.GainSeen, res.ResetSeen = v.GainPct, v.ResetS
	if v.GainPct == 0 {
		res.GainSeen, res.ResetSeen = math.NaN(), math.NaN()
	}
	res.GainOfText, res.ResetInMsg = math.NaN(), math.NaN()
	for i := len(h.all) - 1; i >= 0; i-- {
		if f := &h.all[i]; f.Loop == l.name && f.Event != detect.Cleared && f.At > s.epoch+int64(s.truth.onset*1000) {
			if g, ok := f.Measures.Get("gain"); ok {
				res.GainOfText = g
				if r, ok := f.Measures.Get("reset_s"); ok {
					res.ResetInMsg = r
				}
				break
			}
		}
	}
}
