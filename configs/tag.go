package configs

import (
	"encoding/base64"
	"regexp"
	"strconv"
	"strings"
)

var sourceName = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9_.-]{0,31}$`)

// SplitTag takes "source!address" apart; a tag without a source prefix belongs
// to the source given (the loop's). A "!" counts only behind what can be a
// source's name (letters, digits, "_", "-", "."; at most 32); an address that
// begins like that is written with its source in front.
func SplitTag(tag, source string) (src, address string) {
	if name, rest, ok := strings.Cut(tag, "!"); ok && sourceName.MatchString(name) {
		return name, rest
	}
	return source, tag
}

// ModeTags takes the mode tag apart; b is empty unless the mode is given by two
// tags joined by " & ".
func (l *Loop) ModeTags() (a, b string) {
	a, b, _ = strings.Cut(l.ModeTag, " & ")
	return strings.TrimSpace(a), strings.TrimSpace(b)
}

// TagUse is a tag with the column that names it.
type TagUse struct {
	Column  string
	Tag     string // as written
	Source  string
	Address string
}

// Tags are all tags of the loop in the order of the columns, condition tags
// last. A mode given by two tags gives two, both of column mode.
func (l *Loop) Tags() []TagUse {
	var out []TagUse
	add := func(column, tag string) {
		if tag != "" {
			src, addr := SplitTag(tag, l.Source)
			out = append(out, TagUse{column, tag, src, addr})
		}
	}
	add("pv", l.PV)
	add("sp", l.SP)
	add("op", l.OP)
	m1, m2 := l.ModeTags()
	add("mode", m1)
	add("mode", m2)
	add("alive_tag", l.AliveTag)
	add("gain_tag", l.GainTag)
	add("reset_tag", l.ResetTag)
	add("position", l.Position)
	add("feedforward", l.Feedforward)
	for _, t := range l.ActiveWhen.Terms {
		add("active_when", t.Tag)
	}
	for _, t := range l.SuppressWhen.Terms {
		add("suppress_when", t.Tag)
	}
	return out
}

// checkAddress checks the shape of an address against the kind of its source.
func checkAddress(address string, s *Source) *mistake {
	switch {
	case s.OPCUA != nil:
		return checkNodeID(address)
	case s.MQTT != nil && s.MQTT.Payload == "sparkplug":
		return checkSparkplug(address)
	case s.MQTT != nil:
		return checkTopic(address, s.MQTT.Payload)
	}
	return nil // the source is refused elsewhere
}

const nodeHint = "write a node id such as nsu=urn:kestrel-fen:plant;s=AIC-204.PV, or a browse path such as /Objects/KestrelFen/AIC-204/PV"

var guid = regexp.MustCompile(`^[0-9a-fA-F]{8}-([0-9a-fA-F]{4}-){3}[0-9a-fA-F]{12}$`)

func checkNodeID(a string) *mistake {
	if strings.HasPrefix(a, "/") {
		parts := strings.Split(a[1:], "/")
		if parts[0] != "Objects" || len(parts) < 2 {
			return wrong(nodeHint, "a browse path begins with /Objects/")
		}
		for _, p := range parts[1:] {
			if strings.TrimSpace(p) == "" {
				return wrong("remove the doubled or trailing /", "the browse path %q has an empty name", a)
			}
		}
		return nil
	}
	if strings.HasPrefix(a, "svr=") {
		return wrong(nodeHint, "svr= (nodes of another server) is not taken")
	}
	if len(a) > 1 && a[1] == '=' && strings.ContainsRune("sigb", rune(a[0])) {
		return wrong("write nsu=URI; or ns=NUMBER; in front", "the node id %q names no namespace", a)
	}
	ns, id, ok := strings.Cut(a, ";")
	switch {
	case !ok:
		return wrong(nodeHint, "%q is no OPC UA node id", a)
	case strings.HasPrefix(ns, "nsu="):
		if len(ns) == 4 {
			return wrong(nodeHint, "the namespace URI is empty")
		}
	case strings.HasPrefix(ns, "ns="):
		if n, err := strconv.ParseUint(ns[3:], 10, 16); err != nil || strconv.FormatUint(n, 10) != ns[3:] {
			return wrong("write ns=2; or, better, nsu=URI;", "%q is no namespace index", ns[3:])
		}
	default:
		return wrong(nodeHint, "%q is no OPC UA node id", a)
	}
	if len(id) < 3 || id[1] != '=' {
		return wrong("behind the namespace write s=NAME or i=NUMBER", "%q is no identifier", id)
	}
	v := id[2:]
	switch id[0] {
	case 's':
		return nil
	case 'i':
		if _, err := strconv.ParseUint(v, 10, 32); err != nil {
			return wrong("i= takes a whole number; a name takes s=", "%q is no whole number", v)
		}
	case 'g':
		if !guid.MatchString(v) {
			return wrong("write it as 8-4-4-4-12 hexadecimal digits", "%q is no GUID", v)
		}
	case 'b':
		if _, err := base64.StdEncoding.DecodeString(v); err != nil {
			return wrong("write it in base64", "%q is no base64", v)
		}
	default:
		return wrong("behind the namespace write s=NAME or i=NUMBER", "%q is no identifier", id)
	}
	return nil
}

func checkTopic(a, payload string) *mistake {
	topic, path, hasPath := strings.Cut(a, "#")
	switch {
	case strings.HasPrefix(a, "nsu=") || strings.HasPrefix(a, "ns="):
		return wrong("write a topic, or name an OPC UA source", "%q is an OPC UA node id, and the source is MQTT", a)
	case strings.HasPrefix(a, "$share/") || strings.HasPrefix(a, "$queue/"):
		return wrong("write the plain topic behind it", "shared subscriptions are refused: another reader would get half of the values")
	case topic == "":
		return wrong("write a topic such as kestrel-fen/aic-204/pv", "the topic is empty")
	case len(topic) > 65535:
		return wrong("", "the topic is longer than MQTT allows")
	case hasPath && strings.HasSuffix(topic, "/") && path == "", strings.Contains("/"+topic+"/", "/+/"):
		return wrong("write one topic", "a tag is a single topic, without wildcards")
	case hasPath && payload == "plain":
		return wrong("remove #"+path+", or set payload: json for the source", "a plain payload has no paths")
	case hasPath && path == "":
		return wrong("write topic#path.in.the.json, or the topic alone", "no path behind #")
	case hasPath:
		for p := range strings.SplitSeq(path, ".") {
			if p == "" {
				return wrong("write names separated by single dots", "the path %q has an empty name", path)
			}
		}
	}
	return nil
}

func checkSparkplug(a string) *mistake {
	const hint = "write group/node/device#metric, or group/node#metric for a metric of the node"
	ids, metric, ok := strings.Cut(a, "#")
	if strings.HasPrefix(a, "spBv1.0/") {
		return wrong(hint, "leave spBv1.0 and the message type out")
	}
	if !ok || metric == "" {
		return wrong(hint, "%q names no metric", a)
	}
	parts := strings.Split(ids, "/")
	if len(parts) != 2 && len(parts) != 3 {
		return wrong(hint, "%q is no group/node/device", ids)
	}
	for _, p := range parts {
		if p == "" || strings.Contains(p, "+") {
			return wrong(hint, "%q is no group/node/device", ids)
		}
	}
	return nil
}
