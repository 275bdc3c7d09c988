package opcua

import (
	"slices"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// subscription is one subscription and life group: the tags of whole loops. Its
// plan is fixed; its state outlives connections, so that a resumed session goes
// on where it was.
type subscription struct {
	group collector.Group
	loops []collector.LoopID // whose PV lives in this group
	items []*item

	// As granted by the server, for the subscription that lives now.
	id        uint32
	interval  time.Duration // publishing
	keepAlive time.Duration
	sampling  time.Duration // slowest granted
	clock     time.Time     // last value of CurrentTime, monotonic

	seq     sequence
	heard   time.Time // last answer, monotonic
	missing time.Time // since when a number has been missing
	pending int64     // server clock seen, not yet a tick, ms
	through int64     // of the last tick, ms
}

// item is one address within a subscription, and all the loops and roles that
// it feeds there.
type item struct {
	address  string
	bindings []collector.Binding
	sampling time.Duration // wished: the fastest of its bindings
	pv       bool
	named    bool // its values may have names: a mode, or compared with a word

	// As resolved and granted now.
	node    *ua.NodeID
	index   int
	words   map[int64]string // of a mode's values, as the server has them
	granted time.Duration    // sampling
	covers  time.Duration    // what the granted queue covers at that sampling
	watched bool
	refusal *fault // why it is not watched; guarded by Source.mu

	// Of the last sample taken over.
	seen    bool
	first   bool // the next value is the one every new item starts with
	lost    bool // values are missing before the next one
	time    int64
	arrived int64
	quality collector.Quality
	value   float64
	text    string
}

// Client handles of the server's CurrentTime and State.
const (
	clockHandle = ^uint32(0) >> 1
	stateHandle = clockHandle - 1
)

// plan packs loops into subscriptions of at most maxItems items; the tags of a
// loop stay together. There is always one subscription, so that a source without
// tags still shows whether its server lives.
func plan(bindings []collector.Binding, source uint16, maxItems int) []*subscription {
	byLoop := map[collector.LoopID][]collector.Binding{}
	var order []collector.LoopID
	for _, b := range bindings {
		if _, ok := byLoop[b.Loop]; !ok {
			order = append(order, b.Loop)
		}
		byLoop[b.Loop] = append(byLoop[b.Loop], b)
	}
	var subs []*subscription
	var at map[string]*item // of the newest subscription
	open := func() {
		subs = append(subs, &subscription{group: collector.Group{Source: source, Sub: uint16(len(subs))}})
		at = map[string]*item{}
	}
	open()
	for _, loop := range order {
		fresh := map[string]bool{}
		for _, b := range byLoop[loop] {
			if at[b.Address] == nil {
				fresh[b.Address] = true
			}
		}
		sub := subs[len(subs)-1]
		if len(sub.items)+len(fresh)+2 > maxItems && len(sub.items) > 0 { // two places are the server's own
			open()
			sub = subs[len(subs)-1]
		}
		for _, b := range byLoop[loop] {
			it := at[b.Address]
			if it == nil {
				it = &item{address: b.Address, index: -1}
				at[b.Address] = it
				sub.items = append(sub.items, it)
			}
			wish := time.Duration(b.Sample) * time.Millisecond
			if wish <= 0 {
				wish = time.Second
			}
			if it.sampling == 0 || wish < it.sampling {
				it.sampling = wish
			}
			it.pv = it.pv || b.Role == collector.RolePV
			it.named = it.named || b.Role == collector.RoleMode || b.Role == collector.RoleMode2 || b.Modes != nil
			it.bindings = append(it.bindings, b)
			if b.Role == collector.RolePV && !slices.Contains(sub.loops, loop) {
				sub.loops = append(sub.loops, loop)
			}
		}
	}
	return subs
}
