package configs

import (
	"fmt"
	"slices"
	"strings"
)

func (d *decoder) checkRoutes(c *Config) {
	a := &c.Advise
	names := make([]string, 0, len(a.Senders))
	mqtt := map[string]bool{}
	for _, s := range a.Senders {
		names = append(names, s.Name)
		mqtt[s.Name] = s.MQTT != nil
	}
	known := func(key string, to []string) {
		for _, name := range to {
			if _, ok := mqtt[name]; ok {
				continue
			}
			hint := "add a sender with that name"
			if len(names) > 0 {
				hint = didYouMean(name, names)
			}
			d.say(key, hint, "there is no sender %s", name)
		}
	}
	for i, r := range a.Routes {
		known(fmt.Sprintf("advise.routes[%d].to", i+1), r.To)
	}
	known("advise.digest.to", a.Digest.To)
	if a.Digest.Daily+a.Digest.Weekly != "" && len(a.Digest.To) == 0 {
		d.say("advise.digest", "add to: with one or more senders", "the digest goes to nobody")
	}
	for i, e := range a.Escalate {
		known(fmt.Sprintf("advise.escalate[%d].to", i+1), e.To)
	}
	if a.Links > 0 && c.Page.URL == "" {
		d.say("advise.links", "give page.url, too", "links in mails lead nowhere without the address of the page")
	}
	h := &c.Heartbeat
	d.address("heartbeat.url", h.URL, "write https://HOST/PATH", "https", "http")
	if h.MQTT != "" {
		known("heartbeat.mqtt", []string{h.MQTT})
		if is, ok := mqtt[h.MQTT]; ok && !is {
			d.say("heartbeat.mqtt", "name a sender of the kind mqtt", "the sender %s is not of the kind mqtt", h.MQTT)
		}
	}
	d.both("heartbeat", "mqtt", h.MQTT, "topic", h.Topic)
	if h.Topic != "" {
		d.outside(c, "heartbeat.topic", h.Topic)
	}
}

// checkTags gives every loop its source and checks its tags against the kind of
// their sources. Without sources (replay) tags may be missing.
func (d *decoder) checkTags(c *Config, entries []*entry) {
	names := make([]string, len(c.Sources))
	for i, s := range c.Sources {
		names[i] = s.Name
	}
	for _, e := range entries {
		l := e.loop
		say := func(column, hint, format string, a ...any) {
			d.addLoop(e.place(column), column, l.Name, hint, format, a...)
		}
		if l.Source == "" && len(c.Sources) == 1 {
			l.Source = names[0]
		}
		if l.Source != "" && c.source(l.Source) == nil && len(names) > 0 {
			say("source", didYouMean(l.Source, names), "there is no source %s", l.Source)
			continue
		}
		if len(names) > 0 {
			for _, r := range [][2]string{{"pv", l.PV}, {"sp", l.SP}, {"op", l.OP}} {
				if r[1] == "" && !e.has(r[0]) {
					say(r[0], "give the tag", "there is no %s", strings.ToUpper(r[0]))
				}
			}
		}
		told := false
		for _, t := range l.Tags() {
			s := c.source(t.Source)
			switch {
			case t.Source == "" && len(names) > 1:
				if !told {
					say(t.Column, "name the source of the loop in the column source: "+strings.Join(names, ", "), "the tag %s belongs to no source", t.Tag)
				}
				told = true
			case s == nil && len(names) > 0 && t.Source != "":
				say(t.Column, didYouMean(t.Source, names), "there is no source %s (tag %s)", t.Source, t.Tag)
			case t.Address == "":
				say(t.Column, "write source!address", "the tag %q has no address", t.Tag)
			case s != nil:
				if m := checkAddress(t.Address, s); m != nil {
					say(t.Column, m.hint, "%s", m.what)
				}
			}
		}
	}
}

// warnings says what is allowed but worth knowing.
func warnings(c *Config) []string {
	var w []string
	if len(c.Sources) == 0 {
		w = append(w, "there are no sources: only replay works with this configuration")
	}
	if len(c.Loops) == 0 {
		w = append(w, "there are no loops: name a loop_list or write loops")
	}
	if len(c.Advise.Senders) > 0 && len(c.Advise.Routes) == 0 {
		w = append(w, "there are senders but no routes: nobody is told anything")
	}
	if c.Heartbeat.URL+c.Heartbeat.File+c.Heartbeat.MQTT == "" {
		w = append(w, "there is no heartbeat: nobody is told when the watch itself stops")
	}
	w = append(w, LoopWarnings(c.Loops)...)
	for i, r := range c.Advise.Routes {
		w = append(w, unmatched(c, fmt.Sprintf("advise.routes[%d]", i+1), &r)...)
	}
	return w
}

// LoopWarnings is what is allowed in a loop list but worth saying.
func LoopWarnings(loops []*Loop) (w []string) {
	var guessed, indexed []string
	for _, l := range loops {
		if !l.PVRangeGiven {
			guessed = append(guessed, l.Name)
		}
		if slices.ContainsFunc(l.Tags(), func(t TagUse) bool { return strings.HasPrefix(t.Address, "ns=") }) {
			indexed = append(indexed, l.Name)
		}
	}
	if len(guessed) > 0 {
		w = append(w, "no pv_low and pv_high: "+some(guessed)+"; the range is taken as 0 to 100: small faults are not seen where PV uses little of it, and gain in %/% is a guess")
	}
	if len(indexed) > 0 {
		w = append(w, "tags by ns=: "+some(indexed)+"; the number may change when the server restarts, nsu=URI stays")
	}
	return w
}

// ConditionsUnread says whose conditions a trend without flags does not hold; it is empty
// where no loop has any.
func ConditionsUnread(loops []*Loop) string {
	var names []string
	for _, l := range loops {
		if l.ActiveWhen.Text+l.SuppressWhen.Text != "" {
			names = append(names, l.Name)
		}
	}
	if names == nil {
		return ""
	}
	return "active_when and suppress_when of " + some(names) + " cannot be read from a trend: it is judged as if the law could always act and nothing were suppressed; " +
		"hint: write inactive and suppressed into its column flags, as export does"
}

// some names the first of many.
func some(names []string) string {
	const shown = 5
	if len(names) <= shown {
		return strings.Join(names, ", ")
	}
	return fmt.Sprintf("%s and %d more", strings.Join(names[:shown], ", "), len(names)-shown)
}

// unmatched says which areas, services and patterns of a route no loop has:
// mostly a slip of the pen, sometimes a loop to come.
func unmatched(c *Config, key string, r *Route) (w []string) {
	for _, x := range []struct {
		what  string
		names []string
		match func(name string, l *Loop) bool
	}{
		{"area", r.Areas, func(name string, l *Loop) bool { return l.Area == name }},
		{"service", r.Services, func(name string, l *Loop) bool { return l.Service == name }},
		{"loop", r.Loops, func(name string, l *Loop) bool { return MatchPattern(name, l.Name) }},
	} {
		for _, name := range x.names {
			if !slices.ContainsFunc(c.Loops, func(l *Loop) bool { return x.match(name, l) }) {
				w = append(w, fmt.Sprintf("%s names the %s %q, which no loop matches", key, x.what, name))
			}
		}
	}
	return w
}

// MatchPattern says whether a name matches a pattern in which * stands for any
// characters, none included, and ? for one.
func MatchPattern(pattern, name string) bool {
	p, n := []rune(pattern), []rune(name)
	i, j, star, back := 0, 0, -1, 0
	for j < len(n) {
		switch {
		case i < len(p) && p[i] == '*':
			star, back = i, j
			i++
		case i < len(p) && (p[i] == '?' || p[i] == n[j]):
			i++
			j++
		case star >= 0:
			back++
			i, j = star+1, back
		default:
			return false
		}
	}
	for i < len(p) && p[i] == '*' {
		i++
	}
	return i == len(p)
}
