package quality

import (
	"math"
	"slices"
	"sort"

	"midwatch/collector"
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
	Raised        []float64        // of a fault: how often each kind of each loop was raised from the onset on
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
	return JudgeAll(len(jobs), func(k int) *Case {
		return jobs[k].f.make(o.Seed, o.Hold, jobs[k].i, o.Days).asCase()
	}, o.Nuisance, o.Each)
}

// Judge runs one case through the watch and scores what it says.
func Judge(c *Case, nuisance float64) Result {
	res := Result{Family: c.Family, Index: c.Index, Healthy: c.Healthy, EveryS: c.EveryS[0],
		Seconds: c.Seconds * float64(len(c.Rows)), DelayUnits: math.NaN()}
	heard := newListener()
	watches := make([]*detect.Watch, len(c.Rows))
	for i, row := range c.Rows {
		watches[i] = detect.New(row, collector.LoopID(i), detect.Options{NuisancePerLoopYear: nuisance})
	}
	sites := detect.NewSites(c.Rows)
	slot := int64(0)
	lag := int64(slices.Max(c.EveryS)*2000) + 1
	say := func(f *detect.Finding) { sites.Hear(f, heard.hear) }
	c.Frames(func(i int, f *collector.Frame) {
		res.Frames++
		watches[i].Step(f, say)
		if ev, ok := watches[i].TakeEvidence(); ok {
			sites.Record(collector.LoopID(i), ev)
		}
		if end := (f.Time - lag) / detect.SiteSlotMs * detect.SiteSlotMs; end > slot {
			slot = end
			sites.Slot(end, heard.hear)
		}
	})
	t := c.Truth()
	res.Findings = heard.all
	res.Subtle = c.Subtle()
	scoreFindings(c, &t, heard, &res)
	if !c.Healthy {
		res.Raised = timesRaised(heard.all, c.Epoch+int64(t.OnsetS*1000))
	}
	scoreTuning(c, &t, heard, watches, &res)
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

func scoreFindings(c *Case, t *Truth, h *listener, res *Result) {
	onset, end := c.Epoch+int64(t.OnsetS*1000), c.Epoch+int64(t.EndS*1000)
	var right, wrong, open bool
	for _, e := range h.episodes() {
		k := e.last.Kind
		if aboutData(k) || e.raised > end {
			continue
		}
		own := slices.Contains(t.Kinds, k)
		member := t.Member < 0 || len(c.Rows) == 1 || e.last.Loop == c.Rows[t.Member].Name || k == detect.SharedOscillation
		if t.EarlyS > 0 && own && e.raised < onset && e.raised >= onset-int64(t.EarlyS*1000) {
			e.raised = onset
		}
		if c.Forbid != nil && e.raised >= onset && c.Forbid(e.last.Loop, e.named) {
			f := e.last
			f.At = e.raised
			res.Extra = append(res.Extra, f)
			res.Named = append(res.Named, Claim{e.last.Confidence, false})
			if !own || !member {
				continue
			}
		}
		switch {
		case (res.Healthy || e.raised >= onset && !own) && (slices.Contains(t.Also, k) || c.Clipped(e.last.Loop, k)):
		case res.Healthy || e.raised < onset || !own && !slices.Contains(t.Also, k):
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
				res.DelayUnits = float64(e.raised-onset) / 1000 / t.UnitS
			}
			if len(t.Causes) == 0 {
				break
			}
			said := e.last.Cause
			switch {
			case said == detect.NoCause || said == detect.Undetermined || slices.Contains(t.Soft, said):
				open = true
			case slices.Contains(t.Causes, said):
				right = true
				res.Named = append(res.Named, Claim{e.last.Confidence, true})
			default:
				wrong = true
				res.Said = said
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

// timesRaised counts how often each kind of each loop was raised from a time on, ms UTC: a
// trouble that lasts should be raised once.
func timesRaised(fs []detect.Finding, from int64) (n []float64) {
	at := map[string]int{}
	for i := range fs {
		f := &fs[i]
		if f.Event != detect.Raised || f.At < from || aboutData(f.Kind) {
			continue
		}
		key := f.Loop + "|" + string(f.Kind)
		k, ok := at[key]
		if !ok {
			k = len(n)
			at[key], n = k, append(n, 0)
		}
		n[k]++
	}
	return n
}

func scoreTuning(c *Case, t *Truth, h *listener, watches []*detect.Watch, res *Result) {
	law, own := c.Law(), max(t.Member, 0)
	res.GainTrue, res.ResetTrue, res.HasTuning = law.Gain, law.ResetS, law.PI
	v := watches[own].View()
	res.GainSeen, res.ResetSeen = v.GainPct, v.ResetS
	if v.GainPct == 0 {
		res.GainSeen, res.ResetSeen = math.NaN(), math.NaN()
	}
	res.GainOfText, res.ResetInMsg = math.NaN(), math.NaN()
	for i := len(h.all) - 1; i >= 0; i-- {
		if f := &h.all[i]; f.Loop == c.Rows[own].Name && f.Event != detect.Cleared && f.At > c.Epoch+int64(t.OnsetS*1000) {
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
