package configs

import (
	"fmt"
	"sort"
	"strings"
)

// Relation is how loops of the list hang together.
type Relation string

const (
	CascadePair Relation = "cascade"   // Loops[0] is the outer, Loops[1] the inner loop
	SharedOP    Relation = "shared-op" // selector, standby or split between loops
	SharedPV    Relation = "shared-pv" // one measurement for several loops
	SharedTag   Relation = "shared-tag"
)

// Link is one relation between loops that was read from the list.
type Link struct {
	Relation Relation
	Loops    []string // in the order of the list; of a cascade outer, inner
	Tag      string   // "source!address" of what they share; empty where only the column inner says so
}

// String is the link as check prints it.
func (l Link) String() string {
	names := strings.Join(l.Loops, ", ")
	switch l.Relation {
	case CascadePair:
		how := "column inner"
		if l.Tag != "" {
			how = "outer OP is inner SP: " + l.Tag
		}
		return fmt.Sprintf("cascade: %s sets the set point of %s (%s)", l.Loops[0], l.Loops[1], how)
	case SharedOP:
		return fmt.Sprintf("shared output, read as selector or standby: %s (%s)", names, l.Tag)
	case SharedPV:
		return fmt.Sprintf("shared measurement: %s (%s)", names, l.Tag)
	}
	return fmt.Sprintf("shared tag: %s (%s)", names, l.Tag)
}

// Structure lists what was read between loops: cascades (outer OP = inner SP, or
// the column inner), shared outputs, shared measurements and other tags that
// stand in main roles of several loops. Tags that naturally serve many loops
// (alive_tag, conditions) are left out.
func Structure(loops []*Loop) []Link {
	type use struct{ loop, column string }
	uses := map[string][]use{}
	var order []string
	for _, l := range loops {
		for _, t := range l.Tags() {
			switch t.Column {
			case "alive_tag", "active_when", "suppress_when", "mode", "feedforward":
				continue
			}
			key := t.Source + "!" + t.Address
			if uses[key] == nil {
				order = append(order, key)
			}
			uses[key] = append(uses[key], use{l.Name, t.Column})
		}
	}
	var links []Link
	cascades := map[[2]string]bool{}
	for _, key := range order {
		by := map[string][]string{}
		var all []string
		for _, u := range uses[key] {
			by[u.column] = append(by[u.column], u.loop)
			if len(all) == 0 || all[len(all)-1] != u.loop {
				all = append(all, u.loop)
			}
		}
		explained := false
		for _, outer := range by["op"] {
			for _, inner := range by["sp"] {
				if outer != inner {
					links = append(links, Link{CascadePair, []string{outer, inner}, strings.TrimPrefix(key, "!")})
					cascades[[2]string{outer, inner}] = true
					explained = true
				}
			}
		}
		for _, x := range []struct {
			column   string
			relation Relation
		}{{"op", SharedOP}, {"pv", SharedPV}} {
			if len(by[x.column]) > 1 {
				links = append(links, Link{x.relation, by[x.column], strings.TrimPrefix(key, "!")})
				explained = true
			}
		}
		if !explained && len(all) > 1 {
			links = append(links, Link{SharedTag, all, strings.TrimPrefix(key, "!")})
		}
	}
	for _, l := range loops {
		if l.Inner != "" && !cascades[[2]string{l.Name, l.Inner}] {
			links = append(links, Link{CascadePair, []string{l.Name, l.Inner}, ""})
		}
	}
	rank := map[Relation]int{CascadePair: 0, SharedOP: 1, SharedPV: 2, SharedTag: 3}
	sort.SliceStable(links, func(i, j int) bool { return rank[links[i].Relation] < rank[links[j].Relation] })
	return links
}
