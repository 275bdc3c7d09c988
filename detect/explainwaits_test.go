package detect_test

import (
	"regexp"
	"strconv"
	"strings"
	"testing"

	"midwatch/detect"
)

var waits = regexp.MustCompile(`([0-9.]+) (s|min|h|days)[^0-9(]*\(asked (?:longer than )?([0-9.]+) (s|min|h|days)`)

// waited reads the time held and the time asked, s, from a line of evidence.
func waited(line string) (held, asked float64, ok bool) {
	m := waits.FindStringSubmatch(line)
	if m == nil {
		return 0, 0, false
	}
	unit := map[string]float64{"s": 1, "min": 60, "h": 3600, "days": 86400}
	h, _ := strconv.ParseFloat(m[1], 64)
	a, _ := strconv.ParseFloat(m[3], 64)
	return h * unit[m[2]], a * unit[m[4]], true
}

// What waits shows its time against the one asked: less while nothing is said, and no less
// at the moment when it is.
func TestExplainShowsWhatIsWaitedFor(t *testing.T) {
	cases := map[detect.Kind]struct{ before, at string }{
		detect.FrozenPV:         {"PV has not changed for ", "PV has not changed for "},
		detect.OutputSaturation: {"OP at the limit to which e pushes it for ", "OP at the limit to which e pushes it for "},
		detect.TuningChanged:    {"a change of the tuning is suspected, for ", "a change of the tuning was told:"},
	}
	line := func(lines []string, with string) string {
		for _, x := range lines {
			if strings.HasPrefix(x, with) {
				return x
			}
		}
		return ""
	}
	for _, x := range agedCases() {
		c, ok := cases[x.kind]
		if !ok || x.kind == detect.TuningChanged && x.loop.Name != "PIC-310" { // tags are not waited for
			continue
		}
		w := detect.New(x.loop, 0, detect.Options{})
		var early []string
		said := ""
		for i := range x.frames {
			w.Step(&x.frames[i], func(f *detect.Finding) {
				if f.Kind == x.kind && f.Event == detect.Raised && said == "" {
					said = line(w.Explain(), c.at)
					if said == "" {
						t.Errorf("%s of %s: the evidence lacks %q:\n%s", x.kind, x.loop.Name, c.at, strings.Join(w.Explain(), "\n"))
					}
				}
			})
			if said != "" {
				break
			}
			if i%300 == 0 {
				if e := line(w.Explain(), c.before); e != "" {
					early = append(early, e)
				}
			}
		}
		if held, asked, ok := waited(said); !ok || held < asked {
			t.Errorf("%s of %s is said on %q", x.kind, x.loop.Name, said)
		}
		if len(early) == 0 {
			t.Errorf("%s of %s: nothing is shown before it is said", x.kind, x.loop.Name)
		}
		for _, e := range early {
			if held, asked, ok := waited(e); !ok || held > asked {
				t.Errorf("%s of %s is not said on %q", x.kind, x.loop.Name, e)
			}
			if spoken.MatchString(e) {
				t.Errorf("not for people: %s", e)
			}
		}
	}
}
