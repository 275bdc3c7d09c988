package collector

import "midwatch/configs"

// Reload puts a new loop list in force; ids are its indexes. A loop for which
// keep says true goes on with everything that is known of it, its life group
// included; it must have the same tags and sampling as before. All others begin
// anew and belong to no group until a source joins them.
func (a *Assembler) Reload(loops []*configs.Loop, keep func(LoopID) bool) error {
	fresh, err := New(loops, Options{Shard: a.shard, Shards: a.shards, GraceMs: a.graceMs}, a.emit)
	if err != nil {
		return err
	}
	for i := range fresh.loops {
		if i >= len(a.loops) || !keep(a.id(int32(i))) {
			fresh.loops[i].heard = a.clock
			continue
		}
		set, conds := fresh.loops[i].set, fresh.loops[i].conds
		sameConds := a.loops[i].set.loop.ActiveWhen.Text == set.loop.ActiveWhen.Text && a.loops[i].set.loop.SuppressWhen.Text == set.loop.SuppressWhen.Text
		fresh.loops[i] = a.loops[i]
		fresh.loops[i].set = set
		if !sameConds {
			fresh.loops[i].conds = conds
		}
	}
	a.loops = fresh.loops
	for k, g := range a.groups {
		kept := g.loops[:0]
		for _, i := range g.loops {
			if int(i) < len(a.loops) && a.loops[i].group == int32(k) {
				kept = append(kept, i)
			}
		}
		g.loops = kept
	}
	return nil
}
