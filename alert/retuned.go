package alert

import (
	"cmp"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"midwatch/detect"
)

// What is compared around a change of tuning: as long before as after it, within
// bounds. Less than the least says nothing of loops that are upset once a day.
const (
	retunedShown = 28 * day // since the change, for which it is told
	retunedMost  = 14 * day
	retunedLeast = 3 * day
)

// retuned is a loop whose tuning was changed: from the first change of a session
// to its last, data time.
type retuned struct {
	loop        string
	first, last int64
}

// trouble is what came in a span of time.
type trouble struct {
	comings   int     // episodes raised, or back
	amplitude float64 // largest, % of span; 0: none was given
}

// retunedLines says, a line for each loop whose tuning was changed lately, whether
// it does better or worse since.
func (b *batch) retunedLines() []string {
	d := b.d
	now := d.mem.newest
	var changed []retuned
	byLoop := map[string][]*Episode{}
	for _, e := range b.episodesSince(now - retunedShown - retunedMost - 2*day) {
		switch {
		case e.Into != "":
		case e.Family == familyTuning && e.Last >= now-retunedShown:
			changed = append(changed, retuned{e.Subject.Loop, e.First, e.Last})
		case e.Family == familySwing, e.Family == familyLimit, e.Family == familySlow:
			for _, l := range e.Loops() {
				byLoop[l] = append(byLoop[l], e)
			}
		}
	}
	// The newest session of each loop.
	slices.SortFunc(changed, func(x, y retuned) int {
		return cmp.Or(strings.Compare(x.loop, y.loop), cmp.Compare(y.last, x.last))
	})
	changed = slices.CompactFunc(changed, func(x, y retuned) bool { return x.loop == y.loop })
	var out []string
	for _, c := range changed {
		head := clean(c.loop) + ", changed " + short(c.last, d.set.Zone) + ": "
		span := min(now-c.last, c.first-d.mem.began, retunedMost)
		if span < retunedLeast {
			out = append(out, head+"not enough data yet")
			continue
		}
		before := b.troubles(byLoop[c.loop], c.loop, c.first-span, c.first, now)
		after := b.troubles(byLoop[c.loop], c.loop, c.last, c.last+span, now)
		out = append(out, head+compare(before, after, time.Duration(span)*time.Millisecond))
	}
	return out
}

// episodesSince gives episodes first raised since at, and all in memory.
func (b *batch) episodesSince(at int64) []*Episode {
	var out []*Episode
	from := time.UnixMilli(max(at, 0)).UTC().Format("20060102-1504-")
	for k, v := range b.tx.Scan(bucketEpisodes, nil) {
		if id := string(k); id < from || b.d.mem.episodes[id] != nil {
			continue
		}
		var e Episode
		if json.Unmarshal(v, &e) == nil {
			out = append(out, &e)
		}
	}
	for _, e := range b.d.mem.episodes {
		out = append(out, e)
	}
	return out
}

// troubles counts what the journals say of a loop, from <= at < to. One that was
// there at from and stands at its end counts as well: it did not go.
func (b *batch) troubles(es []*Episode, loop string, from, to, now int64) (t trouble) {
	for _, e := range es {
		was, in, stands := false, 0, e.Open()
		_, _ = scan(b.tx, bucketJournal, append([]byte(e.ID), 0), func(_ string, x Entry) error {
			if x.Finding == nil || x.At >= to {
				return nil
			}
			came := x.What == "raised" || x.What == "came back"
			switch {
			case x.At < from && x.What == "cleared":
				was = false
			case x.At < from:
				was = was || came
			case came:
				in++
			}
			if x.At >= from && x.What != "cleared" && x.Finding.Loop == loop {
				t.amplitude = max(t.amplitude, strength(x.Finding))
			}
			return nil
		})
		if in == 0 && was && (stands || e.Cleared >= to) {
			in = 1
			lead := e.Lead()
			t.amplitude = max(t.amplitude, strength(&lead))
		}
		t.comings += in
	}
	return t
}

// compare says it in words. Amplitudes within a fifth are alike.
func compare(before, after trouble, span time.Duration) string {
	if before.comings+after.comings == 0 {
		return "no trouble in " + duration(span) + " before or after, nothing to compare"
	}
	sign := cmp.Compare(after.comings, before.comings)
	word := "troubles"
	if before.comings == 1 {
		word = "trouble"
	}
	s := fmt.Sprintf("%d %s in %s before, %d in as long after", before.comings, word, duration(span), after.comings)
	if before.amplitude > 0 && after.amplitude > 0 {
		s += fmt.Sprintf("; largest %s %% of span before, %s %% after", detect.AppendSig(nil, before.amplitude), detect.AppendSig(nil, after.amplitude))
		if r := math.Log(after.amplitude / before.amplitude); math.Abs(r) > math.Log(1.25) {
			if by := cmp.Compare(r, 0); sign == 0 || sign == by {
				sign = by
			} else {
				return s + ": fewer and larger, or more and smaller; neither better nor worse"
			}
		}
	}
	return s + ": " + map[int]string{-1: "better", 0: "much the same", 1: "worse"}[sign]
}
