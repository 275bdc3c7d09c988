package configs

import (
	"time"
)

// Kinds are the words of the kinds of findings, for routes.
var Kinds = []string{"sustained-offset", "growing-oscillation", "sustained-oscillation", "sluggish-recovery",
	"output-saturation", "valve-sticking", "frozen-pv", "pv-at-range-end", "not-in-normal-mode", "shared-oscillation",
	"stale-data", "tuning-changed",
	"source-down", "source-late", "samples-lost", "store-failing", "sender-failing", "clock-step", "certificate-expiring"}

// Urgencies are the words of how soon somebody should look, for routes.
var Urgencies = []string{"now", "morning", "note"}

// settings is the table of the configuration, bound to c: it feeds the decoder,
// the defaults, Show and the reference.
func settings(c *Config) group {
	return group{
		{key: "site", help: "where the box stands", open: func() group {
			return group{
				{key: "name", required: true, help: "give the plant's name, such as Kestrel Fen", value: textValue{&c.Site.Name}},
				{key: "time_zone", def: "UTC", help: "zone of shifts, digests and texts, such as Europe/London", value: zoneValue{&c.Site}},
			}
		}},
		{key: "data", required: true, path: plainPath, help: "name the data folder, such as /var/lib/midwatch", value: textValue{&c.Data}},
		{key: "keep", help: "how long and how much is kept", open: func() group {
			return group{
				{key: "full", def: "14d", help: "every frame, within size; a size too small for it is told in the log", value: durationValue{&c.Keep.Full, time.Hour, 0}},
				{key: "thin", def: "400d", help: "thinned frames; this version does not thin: all frames are kept whole for the longest of full, thin and evidence, within size", value: durationValue{&c.Keep.Thin, time.Hour, 0}},
				{key: "evidence", def: "30d", help: "full frames around episodes; kept like all others, see thin", value: durationValue{&c.Keep.Evidence, time.Hour, 0}},
				{key: "episodes", def: "400d", help: "episodes after they ended, with their journals; one that woke somebody stays until it is acknowledged", value: durationValue{&c.Keep.Episodes, 30 * 24 * time.Hour, 0}},
				{key: "names", help: "names of people in journals; 0 is as long as the journal", def: "0", value: durationValue{&c.Keep.Names, 0, 0}},
				{key: "size", def: "20GB", help: "of all trend files; the oldest go first; a change takes a restart", value: sizeValue{&c.Keep.Size, 64e6}},
				{key: "flush", def: "10s", help: "interval of writing trends: what a power cut costs; longer spares the disk", value: durationValue{&c.Keep.Flush, time.Second, 10 * time.Minute}},
			}
		}},
		{key: "page", help: "the page and its HTTP interface", open: func() group {
			return group{
				{key: "listen", def: "127.0.0.1:8420", help: "host:port; beyond this machine only with cert_file, key_file and tokens_file", value: textValue{&c.Page.Listen}},
				{key: "cert_file", path: existing, help: "certificate, PEM; a renewed one is taken without a restart", value: textValue{&c.Page.CertFile}},
				{key: "key_file", path: secretPath, help: "private key, PEM", value: textValue{&c.Page.KeyFile}},
				{key: "tokens_file", path: secretPath, help: "those who may see the page, a line each: name,role,sha256,expires; role is view or act, sha256 that of the token, expires a day; who signed in stays so for 30 days, also over a restart", value: textValue{&c.Page.TokensFile}},
				{key: "url", help: "how people reach the page; for links in messages", value: textValue{&c.Page.URL}},
				{key: "prefix", help: "path in front of all pages behind a proxy, such as /midwatch", value: textValue{&c.Page.Prefix}},
				{key: "shifts", def: "06:00, 14:00, 22:00", help: `when shifts begin, site time, such as ["07:00", "19:00"]; the list of loops offers this shift and the one before`, value: shiftsValue{&c.Page.Shifts}},
			}
		}},
		{key: "sources", help: "where the tags come from; each has a name and one kind", list: &list{
			len:  func() int { return len(c.Sources) },
			grow: func(at Position) { c.Sources = append(c.Sources, Source{Where: at}) },
			item: func(i int) group { return sourceSettings(&c.Sources[i]) },
		}},
		{key: "loop_list", path: plainPath, help: "the loop list, CSV", value: textValue{&c.LoopList}},
		{key: "loops", help: "loops written here, with the columns of the loop list as keys; behind those of loop_list", walk: walkLoops},
		{key: "detect", help: "what little there is to set for detection", open: func() group {
			return group{
				{key: "nuisance_per_loop_year", def: "0.1", help: "false findings wished for at most, per loop and year", value: numberValue{&c.Detect.NuisancePerLoopYear, 0.001, 10}},
				{key: "standing", def: "14d", help: "findings before this age of the watch are standing: found before the baseline ended", value: durationValue{&c.Detect.Standing, 0, 0}},
			}
		}},
		{key: "advise", help: "who is told, how and when", open: func() group { return adviseSettings(&c.Advise) }},
		{key: "heartbeat", help: "tells another program that the watch is well", open: func() group {
			return group{
				{key: "url", help: "called by GET", value: textValue{&c.Heartbeat.URL}},
				{key: "file", path: plainPath, help: "file whose time is set", value: textValue{&c.Heartbeat.File}},
				{key: "mqtt", help: "name of an MQTT sender that publishes it", value: textValue{&c.Heartbeat.MQTT}},
				{key: "topic", help: "topic, with mqtt", value: textValue{&c.Heartbeat.Topic}},
				{key: "every", def: "1m", help: "interval", value: durationValue{&c.Heartbeat.Every, time.Second, 24 * time.Hour}},
			}
		}},
	}
}

// zoneValue reads a time zone and resolves it.
type zoneValue struct{ site *Site }

func (v zoneValue) parse(s string) *mistake {
	const hint = "write a name such as Europe/London or UTC"
	zone, err := time.LoadLocation(s)
	if err != nil || s == "Local" {
		return wrong(hint, "%q is no time zone", s)
	}
	v.site.TimeZone, v.site.Zone = s, zone
	return nil
}
func (v zoneValue) text() string { return v.site.TimeZone }

func adviseSettings(a *Advise) group {
	return group{
		{key: "senders", help: "ways out; each has a name and one kind", list: &list{
			len:  func() int { return len(a.Senders) },
			grow: func(at Position) { a.Senders = append(a.Senders, Sender{Where: at}) },
			item: func(i int) group { return senderSettings(&a.Senders[i]) },
		}},
		{key: "routes", help: "what goes to which sender; a key that is left out matches everything", list: &list{
			len:  func() int { return len(a.Routes) },
			grow: func(at Position) { a.Routes = append(a.Routes, Route{Where: at}) },
			item: func(i int) group {
				r := &a.Routes[i]
				return group{
					{key: "to", required: true, help: "name one or more senders", value: listValue{&r.To, nil}},
					{key: "areas", help: "areas of the loop list", value: listValue{&r.Areas, nil}},
					{key: "services", help: "services of the loop list", value: listValue{&r.Services, nil}},
					{key: "loops", help: "names of loops, with * and ?", value: listValue{&r.Loops, nil}},
					{key: "kinds", help: "kinds of findings", value: listValue{&r.Kinds, Kinds}},
					{key: "urgency", help: "now, morning, note", value: listValue{&r.Urgency, Urgencies}},
					{key: "hours", help: `site time, such as "mon-fri 07:00-16:00"`, value: hoursValue{&r.Hours}},
					{key: "person", help: "who reads it, such as the one on call in hours; the limits night and day count per person over all routes", value: textValue{&r.Person}},
				}
			},
		}},
		{key: "working", def: "mon-fri 07:00-16:00", help: "working hours, site time; night is all else", value: hoursValue{&a.Working}},
		{key: "night", def: "1", help: "advisories per person and night at most", value: intValue{&a.Night, 0, 1000}},
		{key: "day", def: "10", help: "advisories per person and day at most; the rest goes into the digest", value: intValue{&a.Day, 0, 10000}},
		{key: "digest", help: "the summary", open: func() group {
			return group{
				{key: "daily", help: `site time, such as "07:00"; none when left out`, value: clockValue{&a.Digest.Daily, false}},
				{key: "weekly", help: `day and site time, such as "mon 07:00"; none when left out`, value: clockValue{&a.Digest.Weekly, true}},
				{key: "to", help: "senders", value: listValue{&a.Digest.To, nil}},
			}
		}},
		{key: "links", def: "0", help: "how long a link in a mail acknowledges its advisory, once, for whoever has the mail; 0 is no such links", value: durationValue{&a.Links, 0, 7 * 24 * time.Hour}},
		{key: "escalate", help: "tells somebody else when nobody acknowledged; off when left out", list: &list{
			len:  func() int { return len(a.Escalate) },
			grow: func(Position) { a.Escalate = append(a.Escalate, Escalate{}) },
			item: func(i int) group {
				e := &a.Escalate[i]
				return group{
					{key: "after", required: true, help: "write the time without an acknowledgement, such as 2h", value: durationValue{&e.After, time.Minute, 0}},
					{key: "to", required: true, help: "name one or more senders", value: listValue{&e.To, nil}},
				}
			},
		}},
	}
}
