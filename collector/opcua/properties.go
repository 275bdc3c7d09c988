package opcua

import (
	"context"
	"strings"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"
)

// properties reads named standard properties of nodes; what a node lacks is
// absent. It asks the server to translate the names, and browses where it cannot.
func (s *session) properties(ctx context.Context, nodes []*ua.NodeID, names ...string) ([]map[string]any, error) {
	out := make([]map[string]any, len(nodes))
	type place struct {
		node int
		name string
	}
	var at []place
	var found []*ua.ReadValueID
	var paths []*ua.BrowsePath
	for i, n := range nodes {
		out[i] = map[string]any{}
		for _, name := range names {
			at = append(at, place{i, name})
			paths = append(paths, &ua.BrowsePath{StartingNode: n, RelativePath: &ua.RelativePath{Elements: []*ua.RelativePathElement{{
				ReferenceTypeID: ua.NewNumericNodeID(0, id.HasProperty), IncludeSubtypes: true, TargetName: &ua.QualifiedName{Name: name}}}}})
		}
	}
	got, err := s.translateAll(ctx, paths)
	switch {
	case isAny(err, ua.StatusBadServiceUnsupported, ua.StatusBadNotImplemented, ua.StatusBadNotSupported):
		at = nil
		lists, err := s.children(ctx, nodes, id.HasProperty)
		if err != nil {
			return nil, err
		}
		for i, refs := range lists {
			for _, r := range refs {
				for _, name := range names {
					if r.BrowseName != nil && r.BrowseName.Name == name && r.NodeID != nil {
						at = append(at, place{i, name})
						found = append(found, value(ua.NewNodeIDFromExpandedNodeID(r.NodeID)))
					}
				}
			}
		}
	case err != nil:
		return nil, err
	default:
		kept := at[:0]
		for k, r := range got {
			if n := wholeTarget(r); n != nil {
				kept = append(kept, at[k])
				found = append(found, value(n))
			}
		}
		at = kept
	}
	values, err := s.readAll(ctx, found)
	if err != nil {
		return nil, err
	}
	for k, v := range values {
		if v.Value != nil && v.Status>>30 == 0 {
			out[at[k].node][at[k].name] = plain(v.Value.Value())
		}
	}
	return out, nil
}

// plain takes structures out of their wrapping.
func plain(v any) any {
	if e, ok := v.(*ua.ExtensionObject); ok && e != nil {
		return e.Value
	}
	return v
}

// words are the names of a discrete tag's values: EnumStrings by index,
// EnumValues by value, with holes.
func words(enumStrings, enumValues any) map[int64]string {
	w := map[int64]string{}
	if texts, ok := enumStrings.([]*ua.LocalizedText); ok {
		for i, t := range texts {
			if t != nil && t.Text != "" {
				w[int64(i)] = t.Text
			}
		}
	}
	if list, ok := enumValues.([]*ua.ExtensionObject); ok {
		for _, e := range list {
			if v, ok := plain(e).(*ua.EnumValueType); ok && v != nil && v.DisplayName != nil {
				w[v.Value] = v.DisplayName.Text
			}
		}
	}
	if len(w) == 0 {
		return nil
	}
	return w
}

// textOf is the text of a unit or a name.
func textOf(t *ua.LocalizedText) string {
	if t == nil {
		return ""
	}
	return strings.TrimSpace(t.Text)
}
