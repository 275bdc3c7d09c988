package alert

import (
	"encoding/json"
	"fmt"
	"time"

	"midwatch/detect"
)

// What is counted around a change of tuning: as long before as after it, within
// bounds. Less than the least says nothing of loops that are upset once a day.
const (
	retunedShown = 28 * day // since the change, for which it is told
	retunedMost  = 14 * day
	retunedLeast = 3 * day
)

// trouble is what came in a span of time.
type trouble struct {
	comings   int     // episodes raised, or back
	amplitude float64 // largest, % of span; 0: none was given
}

// retunedLines says, a line for each loop whose tuning was changed lately, what
// came of it: the verdict of the comparison of its trends, and beside it, as plain
// counts, the troubles before and after.
func (b *batch) retunedLines() ([]string, error) {
	d := b.d
	now := d.mem.newest
	all, err := sessions(b.tx, now-retunedShown)
	if err != nil {
		return nil, err
	}
	byLoop := map[string][]*Episode{}
	for _, e := range b.episodesSince(now - retunedShown - retunedMost - 2*day) {
		if e.Into == "" && (e.Family == familySwing || e.Family == familyLimit || e.Family == familySlow) {
			for _, l := range e.Loops() {
				byLoop[l] = append(byLoop[l], e)
			}
		}
	}
	var out []string
	for i, c := range all {
		if i+1 < len(all) && all[i+1].Loop == c.Loop {
			continue // the newest session of each loop
		}
		line := clean(c.Loop) + ", changed " + short(c.Last, d.set.Zone) + ": " + c.Outcome.words()
		if span := min(now-c.Last, c.First-max(c.Since, d.mem.began), retunedMost); span >= retunedLeast {
			before := b.troubles(byLoop[c.Loop], c.Loop, c.First-span, c.First, now)
			after := b.troubles(byLoop[c.Loop], c.Loop, c.Last, c.Last+span, now)
			line += "; " + counted(before, after, time.Duration(span)*time.Millisecond)
		}
		out = append(out, line)
	}
	return out, nil
}

// words is the verdict as the digest says it.
func (o Outcome) words() string {
	switch {
	case o.At == 0:
		return "not compared yet"
	case o.Settled:
		return clean(o.Verdict)
	}
	return "so far, " + clean(o.Verdict)
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

// counted says it in words.
func counted(before, after trouble, span time.Duration) string {
	if before.comings+after.comings == 0 {
		return "no trouble in " + duration(span) + " before or after"
	}
	word := "troubles"
	if before.comings == 1 {
		word = "trouble"
	}
	s := fmt.Sprintf("%d %s in %s before, %d in as long after", before.comings, word, duration(span), after.comings)
	if before.amplitude > 0 && after.amplitude > 0 {
		s += fmt.Sprintf("; largest %s %% of span before, %s %% after", detect.AppendSig(nil, before.amplitude), detect.AppendSig(nil, after.amplitude))
	}
	return s
}
