package alert

import (
	"fmt"
	"path"
	"slices"
	"strconv"
	"strings"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

// settings are Settings made ready for use.
type settings struct {
	Settings
	loops    map[string]*configs.Loop
	source   map[string]string   // loop -> source
	bySource map[string][]string // source -> loops, in order of the list
	cascade  relatives
	depth    map[string]int  // of loops in a cascade, 0 outermost
	people   map[string]bool // senders that reach people, not programs
	mail     map[string]bool // senders that are mail
	daily    *clockTime
	weekly   *clockTime
}

// clockTime is a time of the day, and of the week where day is not negative.
type clockTime struct{ day, minute int }

func makeSettings(s Settings) (settings, error) {
	if s.Zone == nil {
		s.Zone = time.UTC
	}
	if s.Standing == 0 {
		s.Standing = 14 * 24 * time.Hour
	}
	if s.Keep == 0 {
		s.Keep = 400 * 24 * time.Hour
	}
	if s.Keep > 0 {
		s.Keep = max(s.Keep, leastKept)
	}
	if s.Advise.Day == 0 {
		// Not filled by configs: its defaults.
		s.Advise.Day, s.Advise.Night = 10, max(s.Advise.Night, 1)
	}
	set := settings{Settings: s, loops: map[string]*configs.Loop{}, source: map[string]string{}, bySource: map[string][]string{},
		cascade: cascades(s.Loops), depth: depths(s.Loops), people: map[string]bool{}, mail: map[string]bool{}}
	for _, l := range s.Loops {
		set.loops[l.Name] = l
		set.source[l.Name] = l.Source
		set.bySource[l.Source] = append(set.bySource[l.Source], l.Name)
	}
	for _, c := range s.Advise.Senders {
		if s.Senders[c.Name] == nil {
			return set, fmt.Errorf("sender %q was not made; hint: give it in Settings.Senders", c.Name)
		}
		set.people[c.Name], set.mail[c.Name] = c.Mail != nil || c.Command != nil, c.Mail != nil
	}
	for _, r := range s.Advise.Routes {
		for _, to := range r.To {
			if s.Senders[to] == nil {
				return set, fmt.Errorf("%s:%d: a route names the sender %q, which is not there; hint: senders are %s", r.Where.File, r.Where.Line, to, names(s.Senders))
			}
		}
	}
	var err error
	if set.daily, err = parseClock(s.Advise.Digest.Daily, false); err != nil {
		return set, err
	}
	set.weekly, err = parseClock(s.Advise.Digest.Weekly, true)
	return set, err
}

func names(m map[string]Sender) string {
	var out []string
	for n := range m {
		out = append(out, n)
	}
	slices.Sort(out)
	return strings.Join(out, ", ")
}

var weekdays = []string{"sun", "mon", "tue", "wed", "thu", "fri", "sat"}

func parseClock(s string, weekly bool) (*clockTime, error) {
	if s == "" || s == "none" || s == "never" {
		return nil, nil
	}
	c, rest := clockTime{day: -1}, s
	if weekly {
		d, r, _ := strings.Cut(s, " ")
		c.day, rest = slices.Index(weekdays, strings.ToLower(d)), r
	}
	t, err := time.Parse("15:04", strings.TrimSpace(rest))
	if err != nil || weekly && c.day < 0 {
		return nil, fmt.Errorf("digest time %q cannot be read; hint: daily \"07:00\", weekly \"mon 07:00\"", s)
	}
	c.minute = t.Hour()*60 + t.Minute()
	return &c, nil
}

// next is the first such time after now, in the zone of now. A time that the
// clocks skip in spring comes as much later as they skip; one that comes twice in
// autumn is taken once.
func (c *clockTime) next(now time.Time) time.Time {
	for i := range 9 {
		t := wallClock(now, i, c.minute)
		if t.After(now) && (c.day < 0 || int(t.Weekday()) == c.day) {
			return t
		}
	}
	return now.Add(24 * time.Hour)
}

// wallClock is the given minute of the day that is days after that of now.
func wallClock(now time.Time, days, minute int) time.Time {
	y, m, d := now.Date()
	return time.Date(y, m, d+days, minute/60, minute%60, 0, 0, now.Location())
}

// within says whether t falls into one of the spans, by the clock on the wall of
// its zone. A span over midnight belongs to the day on which it begins.
func within(hs []configs.Hours, t time.Time) bool {
	min, today := t.Hour()*60+t.Minute(), int(t.Weekday())
	yesterday := (today + 6) % 7
	for _, h := range hs {
		if h.To > h.From {
			if h.Days[today] && min >= h.From && min < h.To {
				return true
			}
			continue
		}
		if h.Days[today] && min >= h.From || h.Days[yesterday] && min < h.To {
			return true
		}
	}
	return false
}

// usualHours are the working hours where none are set.
var usualHours = []configs.Hours{{Days: [7]bool{false, true, true, true, true, true, false}, From: 8 * 60, To: 16 * 60}}

func (s *settings) working() []configs.Hours {
	if len(s.Advise.Working) > 0 {
		return s.Advise.Working
	}
	return usualHours
}

// nextChange is the first minute after t at which within changes; a week and a
// day later at most. Minutes are real ones, so both changes of the clocks are
// met as they come.
func nextChange(hs []configs.Hours, t time.Time) time.Time {
	was := within(hs, t)
	m := t.Truncate(time.Minute)
	for range 8 * 24 * 60 {
		m = m.Add(time.Minute)
		if within(hs, m) != was {
			return m
		}
	}
	return m
}

// matches says whether a route takes an item at wall time t in the site's zone.
func (s *settings) matches(r *configs.Route, it *Item, t time.Time) bool {
	f := &it.Finding
	if len(r.Kinds) > 0 && !slices.ContainsFunc(it.Kinds, func(k detect.Kind) bool { return slices.Contains(r.Kinds, string(k)) }) {
		return false
	}
	if len(r.Urgency) > 0 && !slices.Contains(r.Urgency, string(it.Urgency)) {
		return false
	}
	if len(r.Hours) > 0 && !within(r.Hours, t) {
		return false
	}
	if len(r.Areas) == 0 && len(r.Services) == 0 && len(r.Loops) == 0 {
		return true
	}
	loops := it.Loops
	if len(loops) == 0 && f.Subject.Source != "" {
		loops = s.bySource[f.Subject.Source]
	}
	return slices.ContainsFunc(loops, func(name string) bool {
		l := s.loops[name]
		if l == nil {
			l = configs.NewLoop(name)
		}
		return (len(r.Areas) == 0 || slices.Contains(r.Areas, l.Area)) &&
			(len(r.Services) == 0 || slices.Contains(r.Services, l.Service)) &&
			(len(r.Loops) == 0 || slices.ContainsFunc(r.Loops, func(p string) bool { return like(p, name) }))
	})
}

// like matches a pattern of * (any characters) and ? (one).
func like(pattern, name string) bool {
	// Of path.Match only the two wildcards are wanted, and * is to take a slash.
	plain := strings.NewReplacer("/", "\x01", `\`, `\\`, "[", `\[`)
	ok, err := path.Match(plain.Replace(pattern), strings.ReplaceAll(name, "/", "\x01"))
	return err == nil && ok
}

// ordinal is "2nd" of 2.
func ordinal(n int) string {
	s := "th"
	if n%100 < 11 || n%100 > 13 {
		switch n % 10 {
		case 1:
			s = "st"
		case 2:
			s = "nd"
		case 3:
			s = "rd"
		}
	}
	return strconv.Itoa(n) + s
}
