package configs

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"
)

// field is one row of the settings: a key, how its value is read and written,
// its default, and a line for the reference. Exactly one of value, open, list and
// walk is set.
type field struct {
	key      string
	def      string // default as it would be written; "" none
	help     string
	required bool
	value    value                // a single value or a list of words
	open     func() group         // a group of keys
	list     *list                // a list of groups
	present  func() bool          // of an optional group: whether it was given; nil = always there
	path     pathKind             // of a value: names a file
	secret   func(content []byte) // where the content of a secret file goes
	walk     func(d *decoder, n *node, key string)
}

// group is what stands below a key, bound to the struct it fills.
type group []field

// list is a list of groups.
type list struct {
	len  func() int
	grow func(at Position)
	item func(i int) group
}

// pathKind says what is done with a path at loading.
type pathKind uint8

const (
	noPath     pathKind = iota
	plainPath           // made absolute
	existing            // made absolute, must be readable
	secretPath          // made absolute, must be readable, and not by everybody
)

// value reads and writes one setting.
type value interface {
	parse(s string) *mistake
	text() string // as parse reads it; "" when not set
}

type textValue struct{ p *string }

func (v textValue) parse(s string) *mistake {
	*v.p = s
	return printable(s)
}
func (v textValue) text() string { return *v.p }

type choice struct {
	p     *string
	words []string
}

func (v choice) parse(s string) *mistake {
	_, m := word(s, v.words)
	if m == nil {
		*v.p = s
	}
	return m
}
func (v choice) text() string { return *v.p }

type durationValue struct {
	p        *time.Duration
	min, max time.Duration // max 0 = none
}

func (v durationValue) parse(s string) *mistake {
	d, m := parseDuration(s)
	switch {
	case m != nil:
		return m
	case d < v.min:
		return wrong("at least "+FormatDuration(v.min), "%s is too short", s)
	case v.max > 0 && d > v.max:
		return wrong("at most "+FormatDuration(v.max), "%s is too long", s)
	}
	*v.p = d
	return nil
}
func (v durationValue) text() string { return FormatDuration(*v.p) }

type sizeValue struct {
	p   *int64
	min int64
}

func (v sizeValue) parse(s string) *mistake {
	n, m := parseSize(s)
	if m != nil {
		return m
	}
	if n < v.min {
		return wrong("at least "+formatSize(v.min), "%s is too small", s)
	}
	*v.p = n
	return nil
}
func (v sizeValue) text() string { return formatSize(*v.p) }

type intValue struct {
	p        *int
	min, max int
}

func (v intValue) parse(s string) *mistake {
	if m := leadingZero(s); m != nil {
		return m
	}
	n, err := strconv.Atoi(s)
	if err != nil {
		return wrong("write a number such as "+strconv.Itoa(v.min), "%q is no whole number", s)
	}
	if n < v.min || n > v.max {
		return wrong(fmt.Sprintf("write a number from %d to %d", v.min, v.max), "%d is out of range", n)
	}
	*v.p = n
	return nil
}
func (v intValue) text() string { return strconv.Itoa(*v.p) }

type numberValue struct {
	p        *float64
	min, max float64
}

func (v numberValue) parse(s string) *mistake {
	x, m := parseNumber(s)
	if m != nil {
		return m
	}
	if x < v.min || x > v.max {
		return wrong(fmt.Sprintf("write a number from %s to %s", formatNumber(v.min), formatNumber(v.max)), "%s is out of range", s)
	}
	*v.p = x
	return nil
}
func (v numberValue) text() string { return formatNumber(*v.p) }

type boolValue struct{ p *bool }

func (v boolValue) parse(s string) *mistake {
	switch s {
	case "true":
		*v.p = true
	case "false":
		*v.p = false
	default:
		return wrong("write true or false", "%q is neither true nor false", s)
	}
	return nil
}
func (v boolValue) text() string { return strconv.FormatBool(*v.p) }

type clockValue struct {
	p       *string
	withDay bool
}

func (v clockValue) parse(s string) *mistake {
	clock := s
	if v.withDay {
		day, rest, ok := strings.Cut(s, " ")
		if _, m := word(day, dayNames); !ok || m != nil {
			return wrong(`write "mon 07:00"`, "%q is no day and time", s)
		}
		clock = rest
	}
	t, m := parseClock(clock)
	if m == nil && t == 24*60 {
		m = wrong("write 00:00", "24:00 is the next day")
	}
	if m == nil {
		*v.p = s
	}
	return m
}
func (v clockValue) text() string { return *v.p }

// manyValue is a value that may be written as one or as a list.
type manyValue interface {
	value
	reset()
	texts() []string
}

// shiftsValue is a list of times of day, kept in ascending order.
type shiftsValue struct{ p *[]int }

func (v shiftsValue) parse(s string) *mistake {
	for one := range strings.SplitSeq(s, ",") {
		one = strings.TrimSpace(one)
		t, m := parseClock(one)
		if m != nil {
			return m
		}
		if t == 24*60 {
			return wrong("write 00:00", "24:00 is the next day")
		}
		at, twice := slices.BinarySearch(*v.p, t)
		if twice {
			return wrong("name every shift once", "a shift begins at %s twice", one)
		}
		*v.p = slices.Insert(*v.p, at, t)
	}
	return nil
}
func (v shiftsValue) reset() { *v.p = nil }
func (v shiftsValue) texts() (out []string) {
	for _, t := range *v.p {
		out = append(out, fmt.Sprintf("%02d:%02d", t/60, t%60))
	}
	return out
}
func (v shiftsValue) text() string { return strings.Join(v.texts(), ", ") }

type listValue struct {
	p     *[]string
	words []string // nil: any text
}

func (v listValue) parse(s string) *mistake {
	if v.words != nil {
		if _, m := word(s, v.words); m != nil {
			return m
		}
	} else if m := printable(s); m != nil {
		return m
	}
	*v.p = append(*v.p, s)
	return nil
}
func (v listValue) reset()          { *v.p = nil }
func (v listValue) texts() []string { return *v.p }
func (v listValue) text() string    { return strings.Join(*v.p, ", ") }

type hoursValue struct{ p *[]Hours }

func (v hoursValue) parse(s string) *mistake {
	h, m := parseHours(s)
	if m == nil {
		*v.p = append(*v.p, h)
	}
	return m
}
func (v hoursValue) reset() { *v.p = nil }
func (v hoursValue) texts() (out []string) {
	for _, h := range *v.p {
		out = append(out, h.Text)
	}
	return out
}
func (v hoursValue) text() string { return strings.Join(v.texts(), ", ") }

// decoder walks a YAML tree along the settings.
type decoder struct {
	problemList
	file    string
	given   map[string]Position
	entries []*entry // of loops
}

func (d *decoder) group(n *node, g group, path string) {
	if n.kind != mapping {
		d.add(n.at, path, "write "+joinKeys(g), "%s where keys are expected", n.what())
		return
	}
	known := make([]string, len(g))
	byKey := make(map[string]*field, len(g))
	for i := range g {
		known[i] = g[i].key
		byKey[g[i].key] = &g[i]
	}
	present := map[string]bool{}
	for i, k := range n.keys {
		key := joinKey(path, k.text)
		f, ok := byKey[k.text]
		if !ok {
			d.unknown(k, key, known)
			continue
		}
		present[k.text] = true
		d.given[key] = k.at
		if n.values[i].empty() && f.list == nil && f.walk == nil {
			d.add(k.at, key, "write a value or remove the key", "the key has no value")
			continue
		}
		d.field(n.values[i], f, key)
	}
	for i := range g {
		if f := &g[i]; !present[f.key] {
			d.missing(n.at, f, path)
		}
	}
}

// unknown names the nearest known key, or what to do with a secret.
func (d *decoder) unknown(k *node, key string, known []string) {
	for _, w := range known {
		if w == k.text+"_file" {
			d.add(k.at, key, "write it into a file that others cannot read, and name that file: "+w, "a secret does not belong here")
			return
		}
	}
	hint := didYouMean(k.text, known)
	if _, meant := nearest(k.text, known); !meant {
		if homes := homesOf(k.text, settings(&Config{}), ""); len(homes) > 0 && len(homes) < 4 {
			hint = "it belongs below " + strings.Join(homes, " or ")
		}
	}
	d.add(k.at, key, hint, "unknown key")
}

// homesOf finds the groups that know a key: for keys one level too high or low.
func homesOf(key string, g group, path string) (homes []string) {
	for _, f := range g {
		at := joinKey(path, f.key)
		if f.key == key {
			home := path
			if home == "" {
				home = "the top of the file"
			}
			homes = append(homes, home)
		}
		if f.open != nil {
			homes = append(homes, homesOf(key, f.open(), at)...)
		}
		if f.list != nil {
			f.list.grow(Position{})
			homes = append(homes, homesOf(key, f.list.item(f.list.len()-1), at+"[]")...)
		}
	}
	return homes
}

// missing fills in the default of a key that was not given.
func (d *decoder) missing(at Position, f *field, path string) {
	key := joinKey(path, f.key)
	switch {
	case f.required:
		d.add(at, key, f.help, "the key is missing")
	case f.value != nil && f.def != "":
		if m := f.value.parse(f.def); m != nil {
			panic("configs: default of " + key + ": " + m.what) // a test opens every group
		}
	case f.open != nil && f.present == nil:
		d.group(&node{at: at, kind: mapping}, f.open(), key)
	}
}

func (d *decoder) field(n *node, f *field, key string) {
	switch {
	case f.walk != nil:
		f.walk(d, n, key)
	case f.open != nil:
		d.group(n, f.open(), key)
	case f.list != nil:
		d.items(n, f.list, key)
	default:
		d.value(n, f.value, key)
	}
}

func (d *decoder) items(n *node, l *list, key string) {
	if n.empty() {
		return
	}
	if n.kind != sequence {
		d.add(n.at, key, "write a list: each item on a line of its own that begins with -", "%s where a list is expected", n.what())
		return
	}
	for _, item := range n.values {
		l.grow(item.at)
		i := l.len() - 1
		at := fmt.Sprintf("%s[%d]", key, i+1)
		d.given[at] = item.at
		d.group(item, l.item(i), at)
	}
}

func (d *decoder) value(n *node, v value, key string) {
	many, isMany := v.(manyValue)
	switch {
	case n.kind == mapping || n.kind == sequence && !isMany:
		d.add(n.at, key, "write one value", "%s where a single value is expected", n.what())
	case n.kind == sequence:
		many.reset()
		for _, item := range n.values {
			if item.kind != scalar || item.empty() {
				d.add(item.at, key, "write one value for each item", "an item of the list is %s", itemWhat(item))
				continue
			}
			d.scalar(item, v, key)
		}
	default:
		if isMany {
			many.reset()
		}
		d.scalar(n, v, key)
	}
}

func itemWhat(n *node) string {
	if n.kind == scalar {
		return "empty"
	}
	return n.what()
}

func (d *decoder) scalar(n *node, v value, key string) {
	if strings.TrimSpace(n.text) == "" {
		d.add(n.at, key, "write a value or remove the key", "the key has no value")
		return
	}
	if m := v.parse(n.text); m != nil {
		d.add(n.at, key, m.hint, "%s", m.what)
	}
}

func joinKeys(g group) string {
	keys := make([]string, 0, 4)
	for i, f := range g {
		if i == 3 {
			keys = append(keys, "...")
			break
		}
		keys = append(keys, f.key+": ...")
	}
	return "{" + strings.Join(keys, ", ") + "}"
}
