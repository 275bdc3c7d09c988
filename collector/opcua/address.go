package opcua

import (
	"context"
	"fmt"
	"regexp"
	"strconv"
	"strings"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"
)

// address is a tag's address as written: a node id with a namespace, or a
// browse path from Objects.
type address struct {
	uri  string // namespace uri of a node id, or empty
	node string // node id without the namespace uri: "ns=2;s=x", or "s=x" with uri
	path []step // of a browse path; nil for a node id
}

// step is one name of a browse path. Space is -1 when the path does not say.
type step struct {
	space int
	name  string
}

var (
	nodePart  = regexp.MustCompile(`;([isgb])=`)
	bracketed = regexp.MustCompile(`^(.+)\[(\d{1,6})\]$`)
)

// parseAddress reads `nsu=uri;s=name`, `ns=2;s=name` or `/Objects/2:Area/LIC-310/PV`,
// each with an optional array index at its end: `[2]`.
func parseAddress(text string) (address, error) {
	bad := func(what, hint string) (address, error) {
		return address{}, fmt.Errorf("address %q: %s; hint: %s", text, what, hint)
	}
	switch {
	case strings.HasPrefix(text, "/"):
		path, err := parsePath(text)
		if err != nil {
			return bad(err.Error(), "write /Objects/Area/LIC-310/PV; a name that holds / or & is written with & before it")
		}
		return address{path: path}, nil
	case strings.HasPrefix(text, "nsu="):
		at := nodePart.FindStringIndex(text)
		if at == nil || at[0] == len("nsu=") {
			return bad("no identifier after the namespace", "write nsu=urn:kestrel-fen:plant;s=LIC-310.PV")
		}
		a := address{uri: text[len("nsu="):at[0]], node: text[at[0]+1:]}
		if _, err := ua.ParseNodeID("ns=1;" + a.node); err != nil {
			return bad("the identifier cannot be read", "write s=text, i=number, g=GUID or b=base64 after the namespace")
		}
		return a, nil
	case strings.HasPrefix(text, "ns="):
		if nodePart.FindStringIndex(text) == nil {
			return bad("no identifier after the namespace", "write ns=2;s=LIC-310.PV, or better nsu=urn:...;s=LIC-310.PV")
		}
		if _, err := ua.ParseNodeID(text); err != nil {
			return bad("it is no node id", "write ns=2;s=LIC-310.PV, or better nsu=urn:...;s=LIC-310.PV")
		}
		return address{node: text}, nil
	case strings.HasPrefix(text, "svr="):
		return bad("nodes of another server cannot be watched here", "make that server a source of its own")
	}
	return bad("it names no namespace", "write nsu=urn:...;s=LIC-310.PV, ns=2;s=LIC-310.PV or a browse path /Objects/...")
}

func parsePath(text string) ([]step, error) {
	var path []step
	var name strings.Builder
	space, started := -1, false
	end := func() error {
		if name.Len() == 0 {
			return fmt.Errorf("a name of the path is empty")
		}
		path = append(path, step{space, name.String()})
		name.Reset()
		space = -1
		return nil
	}
	for i := 0; i < len(text); i++ {
		switch c := text[i]; {
		case c == '/':
			if started {
				if err := end(); err != nil {
					return nil, err
				}
			}
			started = true
		case c == '&' && i+1 < len(text):
			i++
			name.WriteByte(text[i])
		case c == ':' && space < 0:
			n, err := strconv.ParseUint(name.String(), 10, 16)
			if err != nil { // a colon in a name, not after a number
				name.WriteByte(c)
				break
			}
			space = int(n)
			name.Reset()
		default:
			name.WriteByte(c)
		}
	}
	if err := end(); err != nil {
		return nil, err
	}
	if path[0].name != "Objects" {
		return nil, fmt.Errorf("the path starts with %q", path[0].name)
	}
	if path = path[1:]; len(path) == 0 {
		return nil, fmt.Errorf("the path ends at Objects")
	}
	return path, nil
}

// target is where an address leads on the server as it is now.
type target struct {
	node  *ua.NodeID
	index int // of an array, -1 for none
	err   error
}

// resolve finds the nodes of addresses. An address that ends with [n] may be a
// node whose name ends so, or an element of an array: the node wins.
func (s *session) resolve(ctx context.Context, texts []string) ([]target, error) {
	out := make([]target, len(texts))
	var short []int // entries whose address has brackets
	for i, text := range texts {
		out[i] = target{index: -1}
		if bracketed.MatchString(text) {
			short = append(short, i)
		}
	}
	if err := s.find(ctx, texts, out, nil); err != nil {
		return nil, err
	}
	if len(short) == 0 {
		return out, nil
	}
	// Does the node with the brackets in its name exist?
	var asked []int
	var nodes []*ua.ReadValueID
	for _, i := range short {
		if out[i].err == nil {
			asked = append(asked, i)
			nodes = append(nodes, attribute(out[i].node, ua.AttributeIDNodeClass))
		}
	}
	got, err := s.readAll(ctx, nodes)
	if err != nil {
		return nil, err
	}
	there := map[int]bool{}
	for k, i := range asked {
		there[i] = got[k].Status>>30 == 0
	}
	var elements []int
	bases := make([]string, len(texts))
	for _, i := range short {
		if there[i] {
			continue
		}
		m := bracketed.FindStringSubmatch(texts[i])
		bases[i] = m[1]
		out[i] = target{index: -1}
		out[i].index, _ = strconv.Atoi(m[2])
		elements = append(elements, i)
	}
	return out, s.find(ctx, bases, out, elements)
}

// find resolves the addresses at the given places, or all of them.
func (s *session) find(ctx context.Context, texts []string, out []target, only []int) error {
	if only == nil {
		only = make([]int, len(texts))
		for i := range only {
			only[i] = i
		}
	}
	var paths []int
	parsed := make(map[int]address)
	for _, i := range only {
		a, err := parseAddress(texts[i])
		if err != nil {
			out[i].err = err
			continue
		}
		if a.path != nil {
			parsed[i] = a
			paths = append(paths, i)
			continue
		}
		out[i].node, out[i].err = s.nodeOf(a)
	}
	if len(paths) == 0 {
		return nil
	}
	steps := make([][]step, len(paths))
	for k, i := range paths {
		steps[k] = parsed[i].path
	}
	nodes, err := s.walk(ctx, steps)
	if err != nil {
		return err
	}
	for k, i := range paths {
		if out[i].node = nodes[k]; nodes[k] == nil {
			out[i].err = fmt.Errorf("the server has nothing at %s: %w; hint: compare each name of the path with the server's browse names", texts[i], ua.StatusBadNoMatch)
		}
	}
	return nil
}

func (s *session) nodeOf(a address) (*ua.NodeID, error) {
	if a.uri == "" {
		return ua.ParseNodeID(a.node)
	}
	for i, uri := range s.spaces {
		if uri == a.uri {
			return ua.ParseNodeID(fmt.Sprintf("ns=%d;%s", i, a.node))
		}
	}
	return nil, fmt.Errorf("the server has no namespace %s; hint: it has %s", a.uri, strings.Join(s.spaces, ", "))
}

// walk follows browse paths from Objects, nil where one leads nowhere. It asks
// the server to translate them, and browses level by level where that fails:
// names may lie in several namespaces, and not every server can translate.
func (s *session) walk(ctx context.Context, paths [][]step) ([]*ua.NodeID, error) {
	nodes := make([]*ua.NodeID, len(paths))
	objects := ua.NewNumericNodeID(0, id.ObjectsFolder)
	// Names without a number are tried in each namespace, the plant's first.
	for space := len(s.spaces) - 1; space >= 0; space-- {
		var ask []*ua.BrowsePath
		var at []int
		for i, p := range paths {
			if nodes[i] != nil || (space < len(s.spaces)-1 && allNumbered(p)) {
				continue
			}
			ask = append(ask, browsePath(objects, p, space))
			at = append(at, i)
		}
		if len(ask) == 0 {
			break
		}
		got, err := s.translateAll(ctx, ask)
		if isAny(err, ua.StatusBadServiceUnsupported, ua.StatusBadNotImplemented, ua.StatusBadNotSupported) {
			break
		}
		if err != nil {
			return nil, err
		}
		for k, r := range got {
			nodes[at[k]] = wholeTarget(r)
		}
	}
	seen := map[string][]*ua.ReferenceDescription{}
	for i, p := range paths {
		if nodes[i] != nil {
			continue
		}
		var err error
		if nodes[i], err = s.descend(ctx, objects, p, seen); err != nil {
			return nil, err
		}
	}
	return nodes, nil
}

// descend follows one path by browsing; what was browsed is kept in seen.
func (s *session) descend(ctx context.Context, from *ua.NodeID, path []step, seen map[string][]*ua.ReferenceDescription) (*ua.NodeID, error) {
	for _, p := range path {
		key := from.String()
		refs, ok := seen[key]
		if !ok {
			got, err := s.children(ctx, []*ua.NodeID{from}, id.HierarchicalReferences)
			if err != nil {
				return nil, err
			}
			refs = got[0]
			seen[key] = refs
		}
		from = nil
		for _, r := range refs {
			if r.BrowseName != nil && r.BrowseName.Name == p.name && (p.space < 0 || int(r.BrowseName.NamespaceIndex) == p.space) && r.NodeID != nil {
				from = ua.NewNodeIDFromExpandedNodeID(r.NodeID)
				break
			}
		}
		if from == nil {
			return nil, nil
		}
	}
	return from, nil
}

func allNumbered(p []step) bool {
	for _, s := range p {
		if s.space < 0 {
			return false
		}
	}
	return true
}

func browsePath(from *ua.NodeID, path []step, space int) *ua.BrowsePath {
	b := &ua.BrowsePath{StartingNode: from, RelativePath: &ua.RelativePath{}}
	for _, p := range path {
		n := p.space
		if n < 0 {
			n = space
		}
		b.RelativePath.Elements = append(b.RelativePath.Elements, &ua.RelativePathElement{
			ReferenceTypeID: ua.NewNumericNodeID(0, id.HierarchicalReferences), IncludeSubtypes: true,
			TargetName: &ua.QualifiedName{NamespaceIndex: uint16(n), Name: p.name}})
	}
	return b
}

// wholeTarget is the node that a path leads to on this very server, or nil.
func wholeTarget(r *ua.BrowsePathResult) *ua.NodeID {
	if r.StatusCode>>30 != 0 {
		return nil
	}
	for _, t := range r.Targets {
		if t.RemainingPathIndex == ^uint32(0) && t.TargetID != nil && t.TargetID.ServerIndex == 0 {
			return ua.NewNodeIDFromExpandedNodeID(t.TargetID)
		}
	}
	return nil
}
