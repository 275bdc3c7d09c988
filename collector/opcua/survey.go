package opcua

import (
	"context"
	"fmt"
	"maps"
	"slices"
	"strings"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"

	"midwatch/configs"
)

// Surveyor is the optional ability of a source to draft a loop list from what
// it finds on the server.
type Surveyor interface {
	// Survey looks for controllers, objects or names before variables that have
	// a measurement, an output and a set point or mode, and drafts a loop of each, for review:
	// names and ranges are as found, tuning and action are left out. It reads
	// only and closes its session.
	Survey(ctx context.Context) ([]*configs.Loop, error)
}

var _ Surveyor = (*Source)(nil)

// part is what a variable is to a loop, by its name.
type part uint8

const (
	partPV part = iota
	partSP
	partOP
	partMode
	partGain
	partReset
	partPosition
	partCount
)

// partNames are names that variables of a controller commonly have, squeezed:
// no case, spaces, hyphens, underscores or dots (common practice, no source).
// The first that is there wins.
var partNames = [partCount][]string{
	partPV:       {"pv", "processvalue", "processvariable", "measurement", "measuredvalue", "actualvalue", "cvact", "pvin", "input"},
	partSP:       {"sp", "setpoint", "spact", "spinuse", "workingsetpoint", "wsp", "spint", "splocal"},
	partOP:       {"op", "out", "output", "mv", "co", "cv", "manipulatedvalue", "manipulatedvariable", "controlleroutput", "outputvalue"},
	partMode:     {"mode", "modeact", "actualmode", "modeactual", "automan", "modeofoperation"},
	partGain:     {"gain", "kp", "kc", "propgain", "proportionalgain", "pgain"},
	partReset:    {"reset", "ti", "tn", "resettime", "integraltime"},
	partPosition: {"position", "pos", "valveposition", "stroke", "zt", "feedbackposition"},
}

// surveyLimit bounds how many nodes are looked at: a wrong turn into a large
// address space must end.
const surveyLimit = 500_000

type surveyed struct {
	name, area string
	at         [partCount]*ua.NodeID
}

// Survey implements [Surveyor].
func (s *Source) Survey(ctx context.Context) ([]*configs.Loop, error) {
	var loops []*configs.Loop
	err := s.visit(ctx, func(sess *session) error {
		found, err := s.explore(ctx, sess)
		if err != nil {
			return err
		}
		loops, err = s.draft(ctx, sess, found)
		return err
	})
	return loops, err
}

// explore walks the objects below Objects, level by level, leaving out the
// server's own, and gathers those that look like a controller.
func (s *Source) explore(ctx context.Context, sess *session) ([]surveyed, error) {
	type place struct {
		node       *ua.NodeID
		name, area string
	}
	level := []place{{node: ua.NewNumericNodeID(0, id.ObjectsFolder)}}
	seen := map[string]bool{level[0].node.String(): true}
	var found []surveyed
	looked := 0
	for len(level) > 0 {
		nodes := make([]*ua.NodeID, len(level))
		for i, p := range level {
			nodes[i] = p.node
		}
		lists, err := sess.children(ctx, nodes, id.HierarchicalReferences)
		if err != nil {
			return nil, fmt.Errorf("browsing: %w", err)
		}
		var next []place
		for i, refs := range lists {
			// Variables of one controller lie in one object, or side by side
			// with its name before theirs: LIC-310.PV, LIC-310.SP.
			groups := map[string]map[string]*ua.NodeID{"": {}}
			for _, r := range refs {
				if r.NodeID == nil || r.NodeID.ServerIndex != 0 || r.BrowseName == nil {
					continue
				}
				node := ua.NewNodeIDFromExpandedNodeID(r.NodeID)
				switch r.NodeClass {
				case ua.NodeClassVariable:
					name := r.BrowseName.Name
					groups[""][squeeze(name)] = node
					if cut := strings.LastIndexAny(name, "._-/ "); cut > 0 {
						if groups[name[:cut]] == nil {
							groups[name[:cut]] = map[string]*ua.NodeID{}
						}
						groups[name[:cut]][squeeze(name[cut+1:])] = node
					}
				case ua.NodeClassObject:
					key := node.String()
					if node.Namespace() == 0 || seen[key] { // the server's own, or reached before
						continue
					}
					seen[key] = true
					next = append(next, place{node, r.BrowseName.Name, level[i].name})
				}
			}
			for _, prefix := range slices.Sorted(maps.Keys(groups)) {
				c, ok := controller(groups[prefix])
				if !ok {
					continue
				}
				if c.name, c.area = prefix, level[i].name; prefix == "" {
					c.name, c.area = level[i].name, level[i].area
				}
				found = append(found, c)
			}
		}
		if looked += len(next); looked > surveyLimit {
			return nil, fmt.Errorf("more than %d objects; hint: let the survey's user see only the plant's part of the address space", surveyLimit)
		}
		level = next
	}
	return found, nil
}

// controller says whether variables of these names make a loop: PV and OP at
// least, and a set point or a mode.
func controller(byName map[string]*ua.NodeID) (c surveyed, ok bool) {
	for p, names := range partNames {
		for _, n := range names {
			if node := byName[n]; node != nil {
				c.at[p] = node
				break
			}
		}
	}
	return c, c.at[partPV] != nil && c.at[partOP] != nil && (c.at[partSP] != nil || c.at[partMode] != nil)
}

func squeeze(name string) string {
	return strings.Map(func(r rune) rune {
		if strings.ContainsRune(" -_.", r) {
			return -1
		}
		return r
	}, strings.ToLower(name))
}

// draft makes loops of what was found, with the ranges that the server states.
func (s *Source) draft(ctx context.Context, sess *session, found []surveyed) ([]*configs.Loop, error) {
	var nodes []*ua.NodeID
	for _, f := range found {
		nodes = append(nodes, f.at[partPV], f.at[partOP])
	}
	props, err := sess.properties(ctx, nodes, "EURange", "EngineeringUnits")
	if err != nil {
		return nil, fmt.Errorf("reading ranges: %w", err)
	}
	taken := map[string]bool{}
	var loops []*configs.Loop
	for i, f := range found {
		l := configs.NewLoop(freeName(f, taken))
		l.Area, l.Source = f.area, s.name
		for p, to := range map[part]*string{partPV: &l.PV, partSP: &l.SP, partOP: &l.OP, partMode: &l.ModeTag,
			partGain: &l.GainTag, partReset: &l.ResetTag, partPosition: &l.Position} {
			if f.at[p] != nil {
				*to = sess.portable(f.at[p])
			}
		}
		if low, high, unit := rangeAndUnit(props[2*i]); low == low {
			l.PVLow, l.PVHigh, l.PVRangeGiven = low, high, true
			l.SPLimitLow, l.SPLimitHigh, l.Unit = low, high, unit
		}
		if low, high, _ := rangeAndUnit(props[2*i+1]); low == low {
			l.OPLow, l.OPHigh, l.OPLimitLow, l.OPLimitHigh = low, high, low, high
		}
		loops = append(loops, l)
	}
	slices.SortFunc(loops, func(a, b *configs.Loop) int { return strings.Compare(a.Name, b.Name) })
	return loops, nil
}

// freeName is the object's name, with its area before it where two are alike,
// at most 64 characters.
func freeName(f surveyed, taken map[string]bool) string {
	name := f.name
	if taken[name] {
		name = f.area + " " + f.name
	}
	for k := 2; taken[name]; k++ {
		name = fmt.Sprintf("%s %s %d", f.area, f.name, k)
	}
	if r := []rune(name); len(r) > 64 {
		name = string(r[:64])
	}
	taken[name] = true
	return name
}

// portable is a node id that survives a restart of the server: by the name of
// its namespace instead of its number.
func (s *session) portable(n *ua.NodeID) string {
	text := n.String()
	if space := int(n.Namespace()); space > 0 && space < len(s.spaces) {
		if _, rest, ok := strings.Cut(text, ";"); ok {
			return "nsu=" + s.spaces[space] + ";" + rest
		}
	}
	return text
}
