package alert

import (
	"cmp"
	"slices"
	"strings"

	"midwatch/configs"
	"midwatch/detect"
)

// Families: kinds that are one trouble when they come to one subject at one time.
const (
	familyLimit   = "limit"
	familySwing   = "swing"
	familySlow    = "slow"
	familyMeasure = "measurement"
	familyMode    = "mode"
	familyTuning  = "tuning"
	familyData    = "data"
	familySource  = "source"
)

var families = map[detect.Kind]string{
	// An OP at its limit, the offset it leaves and the wind-up after it.
	detect.OutputSaturation: familyLimit,
	detect.SustainedOffset:  familyLimit,
	// One loop swings for one reason at a time; a sticking valve is a reason to swing.
	detect.GrowingOscillation:   familySwing,
	detect.SustainedOscillation: familySwing,
	detect.SharedOscillation:    familySwing,
	detect.ValveStickingKind:    familySwing,
	detect.SluggishRecovery:     familySlow,
	detect.FrozenPV:             familyMeasure,
	detect.PVAtRangeEnd:         familyMeasure,
	detect.NotInNormalMode:      familyMode,
	detect.TuningChanged:        familyTuning,
	detect.StaleData:            familyData,
	detect.SourceDown:           familySource,
	detect.SourceLate:           familySource,
}

// loopFamilies are those in which a loop can have an episode.
var loopFamilies = []string{familyLimit, familySwing, familySlow, familyMeasure, familyMode, familyTuning, familyData}

func familyOf(k detect.Kind) string {
	if f, ok := families[k]; ok {
		return f
	}
	return string(k)
}

// Trouble names what a finding is about: findings of one subject that are of one family
// are one trouble, however often it comes back.
func Trouble(f *detect.Finding) string { return place(subjectKey(f.Subject), familyOf(f.Kind)) }

// momentary kinds are events, not states: they are over as soon as they are said.
func momentary(k detect.Kind) bool { return k == detect.TuningChanged || k == detect.ClockStepKind }

// place is where an episode is looked up.
func place(subject, family string) string { return subject + "\x00" + family }

// samePeriod says whether two findings may be one swing: periods within a factor
// of two, or not known.
func samePeriod(a, b *detect.Finding) bool {
	x, okx := a.Measures.Get("period_s")
	y, oky := b.Measures.Get("period_s")
	return !okx || !oky || x <= 0 || y <= 0 || (x <= 2*y && y <= 2*x)
}

// relatives of a loop: those in one cascade with it.
type relatives map[string][]string

func cascades(loops []*configs.Loop) relatives {
	known := map[string]bool{}
	for _, l := range loops {
		known[l.Name] = true
	}
	near := map[string][]string{}
	for _, l := range loops {
		if l.Inner != "" && l.Inner != l.Name && known[l.Inner] {
			near[l.Name] = append(near[l.Name], l.Inner)
			near[l.Inner] = append(near[l.Inner], l.Name)
		}
	}
	out := relatives{}
	for name := range near {
		seen, todo := map[string]bool{name: true}, []string{name}
		for len(todo) > 0 {
			x := todo[0]
			todo = todo[1:]
			for _, y := range near[x] {
				if !seen[y] {
					seen[y] = true
					todo = append(todo, y)
					out[name] = append(out[name], y)
				}
			}
		}
	}
	return out
}

// depths says how many loops stand above each in its cascade.
func depths(loops []*configs.Loop) map[string]int {
	outer := map[string]string{}
	for _, l := range loops {
		if l.Inner != "" && l.Inner != l.Name {
			outer[l.Inner] = l.Name
		}
	}
	out := map[string]int{}
	for inner := range outer {
		n := 0
		for x := inner; outer[x] != "" && n < len(loops); x = outer[x] { // a ring ends, too
			n++
		}
		out[inner] = n
	}
	return out
}

// home finds the episode a finding belongs to: the one it is in, the open one of
// its place, an open one of its cascade or dead source, one that ended less than
// a day ago; nil when it is a new trouble.
func (d *Desk) home(f *detect.Finding, family string) *Episode {
	m := &d.mem
	if e := m.resolve(m.heard[memberKey(f)].Episode); e != nil && e.Open() && e.member(f) != nil && e.member(f).Open {
		return e
	}
	if e := d.groupHome(f); e != nil {
		return e
	}
	own := m.episodes[m.index[place(subjectKey(f.Subject), family)]]
	if own != nil && own.Open() && (own.has(f.Subject) || own.compatible(f)) {
		return own
	}
	if family == familyData {
		if e := m.episodes[m.index[place("source:"+d.set.source[f.Loop], familySource)]]; e != nil && e.openKind(detect.SourceDown) {
			return e
		}
	}
	if f.Loop != "" && (family == familySwing || family == familyLimit) {
		for _, r := range d.set.cascade[f.Loop] {
			if e := m.episodes[m.index[place("loop:"+r, family)]]; e != nil && e.Open() && e.compatible(f) {
				return e
			}
		}
	}
	// Only what the subject itself had comes back, or the swing of its group: a loop that
	// was once part of another's episode starts one of its own.
	if own != nil && own.Into == "" && (own.Subject == f.Subject || family == familySwing && own.groupSwing(f)) && f.At-own.Cleared <= day {
		return own
	}
	return nil
}

// groupHome finds where a group goes on that is first heard of: in the episode that was open
// first of those of its loops, so that who was told of one is told of all, or in that of the
// same group which ended less than a day ago.
func (d *Desk) groupHome(f *detect.Finding) (e *Episode) {
	if f.Kind != detect.SharedOscillation {
		return nil
	}
	rank := func(o *Episode) (open int, at int64) {
		if o.Open() {
			return 1, -o.Raised
		}
		return 0, o.Cleared
	}
	for _, l := range f.Loops {
		o := d.mem.resolve(d.mem.index[place("loop:"+l, familySwing)])
		if o == nil || o == e || o.Open() && !o.compatible(f) || !o.Open() && (!share(o.Group, f.Loops) || f.At-o.Cleared > day) {
			continue
		}
		if e == nil {
			e = o
			continue
		}
		a, x := rank(o)
		if b, y := rank(e); cmp.Or(cmp.Compare(a, b), cmp.Compare(x, y), strings.Compare(e.ID, o.ID)) > 0 {
			e = o
		}
	}
	return e
}

// share says whether two lists have two loops in common.
func share(a, b []string) bool {
	n := 0
	for _, l := range a {
		if slices.Contains(b, l) {
			n++
		}
	}
	return n > 1
}

// resolve follows folded episodes to where they went on.
func (m *memory) resolve(id string) *Episode {
	e := m.episodes[id]
	for n := 0; e != nil && e.Into != "" && n < 8; n++ {
		e = m.episodes[e.Into]
	}
	return e
}

func (e *Episode) member(f *detect.Finding) *Member {
	for i := range e.Members {
		if g := &e.Members[i].Finding; g.Kind == f.Kind && g.Subject == f.Subject {
			return &e.Members[i]
		}
	}
	return nil
}

func (e *Episode) has(s detect.Subject) bool {
	for i := range e.Members {
		if e.Members[i].Finding.Subject == s {
			return true
		}
	}
	return false
}

func (e *Episode) compatible(f *detect.Finding) bool {
	for i := range e.Members {
		if e.Members[i].Open && samePeriod(&e.Members[i].Finding, f) {
			return true
		}
	}
	return false
}

// groupSwing: the swing of a loop may be that of the group which had the episode.
func (e *Episode) groupSwing(f *detect.Finding) bool {
	return slices.Contains(e.Group, f.Loop) && slices.ContainsFunc(e.Members, func(m Member) bool {
		return m.Finding.Kind == detect.SharedOscillation && samePeriod(&m.Finding, f)
	})
}

func (e *Episode) openKind(k detect.Kind) bool {
	for i := range e.Members {
		if e.Members[i].Open && e.Members[i].Finding.Kind == k {
			return true
		}
	}
	return false
}

// gather folds into e what was raised before the common trouble was seen.
func (b *batch) gather(e *Episode, f *detect.Finding) error {
	m := &b.d.mem
	var loops []string
	family := familySwing
	switch f.Kind {
	case detect.SharedOscillation:
		loops = f.Loops
	case detect.SourceDown:
		loops, family = b.d.set.bySource[f.Subject.Source], familyData
	default:
		return nil
	}
	for _, l := range loops {
		p := place("loop:"+l, family)
		o := m.episodes[m.index[p]]
		if o != nil && o != e && o.Open() && !o.openKind(detect.SharedOscillation) && o.compatible(f) {
			if err := b.foldInto(o, e, f.At); err != nil {
				return err
			}
		}
		if family == familySwing && (o == nil || !o.Open() || o.Into != "") {
			m.index[p] = e.ID
		}
	}
	return nil
}

func (b *batch) foldInto(o, e *Episode, at int64) error {
	for i := range o.Members {
		if !o.Members[i].Open {
			continue
		}
		g := o.Members[i].Finding
		if t := e.member(&g); t != nil {
			*t = o.Members[i]
		} else {
			e.Members = append(e.Members, o.Members[i])
		}
		b.d.mem.index[place(subjectKey(g.Subject), familyOf(g.Kind))] = e.ID
		if err := b.hearIn(&g, e.ID); err != nil {
			return err
		}
	}
	o.Into, o.Cleared, o.Last = e.ID, at, at
	if err := b.journal(o, Entry{At: at, What: "folded into " + e.ID}); err != nil {
		return err
	}
	if err := b.journal(e, Entry{At: at, What: "took in " + o.ID + " (" + strings.Join(o.Loops(), ", ") + ")"}); err != nil {
		return err
	}
	// What nobody was told of yet need not be told.
	dropped, err := b.dropSteps(o.ID)
	if err != nil || o.Steps == 0 || dropped == o.Steps {
		return err
	}
	return b.step(o, detect.Cleared, at, true, false)
}
