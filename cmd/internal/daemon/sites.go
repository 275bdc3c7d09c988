package daemon

import (
	"bytes"
	"cmp"
	"compress/flate"
	"encoding/gob"
	"fmt"
	"math"
	"slices"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// gathering hands the evidence of all lanes to the site detectors, slot by slot
// of data time, when the lanes have all passed the end of the slot. Evidence of
// later slots waits here, so that a lane that is ahead changes nothing. So does what
// loops say of their swings, which the groups have a say in.
type gathering struct {
	loops   []*configs.Loop // by id; nil: gone
	sites   *detect.Sites
	waiting map[int64][]record // by end of the slot
	said    []said             // of swings, not passed on yet
	done    int64              // end of the last slot judged, ms UTC; 0 none
}

func newGathering(loops []*configs.Loop) *gathering {
	return &gathering{loops: loops, sites: detect.NewSites(present(loops)), waiting: map[int64][]record{}}
}

// present fills the places of loops that are gone, for whoever indexes by id.
func present(loops []*configs.Loop) []*configs.Loop {
	out := make([]*configs.Loop, len(loops))
	for i, l := range loops {
		if out[i] = l; l == nil {
			out[i] = configs.NewLoop("")
		}
	}
	return out
}

func (g *gathering) record(rs []record) {
	for _, r := range rs {
		if r.Slot > g.done {
			g.waiting[r.Slot] = append(g.waiting[r.Slot], r)
		}
	}
}

// hear takes what a loop says. It is passed on at once where groups have no say in it, and
// where it is the last word of a watch: of that loop no data may come any more.
func (g *gathering) hear(s *said, emit func(*said)) {
	if s.Kind != detect.ValveStickingKind && s.Kind != detect.SustainedOscillation {
		emit(s)
		return
	}
	g.said = append(g.said, *s)
	if s.last {
		g.pass(s.At+1, s.Loop, emit)
	}
}

// pass hands on what waits from before t, of one loop or of all, as it stands beside the
// groups of now.
func (g *gathering) pass(t int64, loop string, emit func(*said)) {
	slices.SortStableFunc(g.said, func(a, b said) int {
		return cmp.Or(cmp.Compare(a.At, b.At), strings.Compare(a.Loop, b.Loop), anew(&a)-anew(&b), less(&a.Finding, &b.Finding))
	})
	g.said = slices.DeleteFunc(g.said, func(x said) bool {
		if x.At >= t || loop != "" && x.Loop != loop {
			return false
		}
		g.sites.Hear(&x.Finding, func(f *detect.Finding) {
			x.Finding = *f
			emit(&x)
		})
		return true
	})
}

// anew orders the end of a word after the newer one that takes its place.
func anew(s *said) int {
	if s.Event == detect.Cleared && s.Reason == detect.Rejudged {
		return 1
	}
	return 0
}

// rest hands on all that waits still.
func (g *gathering) rest(emit func(*said)) { g.pass(math.MaxInt64, "", emit) }

// advance judges every slot that ends at or before t, the time up to which the
// evidence is complete.
func (g *gathering) advance(t int64, emit func(*said)) {
	if g.done == 0 {
		first := int64(0)
		for end := range g.waiting {
			if first == 0 || end < first {
				first = end
			}
		}
		if first == 0 || first > t {
			g.pass(t+1, "", emit)
			return
		}
		g.done = first - detect.SiteSlotMs
	}
	for end := g.done + detect.SiteSlotMs; end <= t; end += detect.SiteSlotMs {
		g.pass(end, "", emit)
		for _, r := range g.waiting[end] {
			g.sites.Record(r.id, r.Evidence)
		}
		delete(g.waiting, end)
		g.sites.Slot(end, func(f *detect.Finding) { emit(&said{Finding: *f}) })
		g.done = end
	}
	g.pass(t+1, "", emit)
}

// gatheringMemory is what a gathering keeps over a restart; loops by name.
type gatheringMemory struct {
	Done    int64
	Sites   []byte
	Waiting []waitingEvidence
	Said    []detect.Finding
}

type waitingEvidence struct {
	Loop     string
	Evidence detect.Evidence
}

// mostSitesBytes is what the window takes as one memory, less a margin.
const mostSitesBytes = 60 << 10

// save keeps what the site detectors hold and the evidence that waits. Evidence
// of loops that do not swing says nothing to detectors that begin anew. Should
// hundreds of loops swing at once, the evidence of one slot is left out.
func (g *gathering) save() ([]byte, error) {
	m := gatheringMemory{Done: g.done, Sites: g.sites.Save(nil)}
	for i := range g.said {
		m.Said = append(m.Said, g.said[i].Finding)
	}
	for _, rs := range g.waiting {
		for _, r := range rs {
			if l := g.loops[r.id]; l != nil && r.Live {
				m.Waiting = append(m.Waiting, waitingEvidence{l.Name, r.Evidence})
			}
		}
	}
	b, err := m.encode()
	if err == nil && len(b) > mostSitesBytes {
		m.Waiting = nil
		b, err = m.encode()
	}
	return b, err
}

func (m *gatheringMemory) encode() ([]byte, error) {
	// Deflated, since most evidence says that nothing swings: a list of zeros.
	var b bytes.Buffer
	z, err := flate.NewWriter(&b, flate.BestSpeed)
	if err != nil {
		return nil, fmt.Errorf("memory of the site detectors: %w", err)
	}
	if err := gob.NewEncoder(z).Encode(m); err != nil {
		return nil, fmt.Errorf("memory of the site detectors: %w", err)
	}
	if err := z.Close(); err != nil {
		return nil, fmt.Errorf("memory of the site detectors: %w", err)
	}
	return b.Bytes(), nil
}

// load restores what save kept; loops that are gone are left out.
func (g *gathering) load(b []byte) error {
	var m gatheringMemory
	if err := gob.NewDecoder(flate.NewReader(bytes.NewReader(b))).Decode(&m); err != nil {
		return fmt.Errorf("memory of the site detectors: %w", err)
	}
	if err := g.sites.Load(m.Sites); err != nil {
		return fmt.Errorf("memory of the site detectors: %w", err)
	}
	ids := map[string]collector.LoopID{}
	for i, l := range g.loops {
		if l != nil {
			ids[l.Name] = collector.LoopID(i)
		}
	}
	for _, f := range m.Said {
		if id, ok := ids[f.Loop]; ok {
			f.ID = id
			g.said = append(g.said, said{Finding: f})
		}
	}
	g.done = m.Done
	for _, w := range m.Waiting {
		if id, ok := ids[w.Loop]; ok {
			g.record([]record{{id, w.Evidence}})
		}
	}
	return nil
}
