package dossier

import (
	_ "embed"
	"encoding/json"
	"fmt"
	"html/template"
	"io"
	"math"
	"slices"
	"strings"
	"time"

	"midwatch/collector/trend"
	"midwatch/detect"
)

//go:embed page.html
var pageText string

// marks of the kinds: one small drawing each, 14 by 14, stroke only.
var marks = map[detect.Kind]string{
	detect.GrowingOscillation:   "M0 7 2 6 4 8.5 6 4.5 8 10 10 3 12 12 14 1",
	detect.SustainedOscillation: "M0 7 2 3 5 11 8 3 11 11 14 7",
	detect.SustainedOffset:      "M0 3H14M0 10H5 9 14",
	detect.SluggishRecovery:     "M0 2H3V12C5 6 9 3.5 14 3",
	detect.OutputSaturation:     "M0 2H14M0 12C4 12 5 2.5 8 2.5H14",
	detect.ValveStickingKind:    "M0 11H4V3H9V11H14",
	detect.FrozenPV:             "M1 4V10M13 4V10M1 7H13",
	detect.PVAtRangeEnd:         "M0 12H14M0 4C4 4 5 12 8 12",
	detect.NotInNormalMode:      "M2 12V5L7 9 12 5V12",
	detect.StaleData:            "M0 7H3M5.5 7H8.5M11 7H14",
	detect.SharedOscillation:    "M1 5Q4-1 7 5T13 5M1 11Q4 5 7 11T13 11",
	detect.TuningChanged:        "M7 1V13M1 10H7M7 4H13",
}

func mark(k detect.Kind) template.HTML {
	p, ok := marks[k]
	if !ok {
		return ""
	}
	return template.HTML(`<svg class="mk" viewBox="-1 -1 16 16" aria-hidden="true"><path d="` + p + `"/></svg>`)
}

var page = template.Must(template.New("page").Funcs(template.FuncMap{
	"mark":      mark,
	"words":     func(v any) string { return strings.ReplaceAll(fmt.Sprint(v), "-", " ") },
	"num":       shown,
	"short":     short,
	"cap":       capital,
	"some":      some,
	"mostLoads": func() int { return mostLoads },
}).Parse(pageText))

// shown is a number on the page: times in the unit a person would use.
func shown(n Number) string {
	if !n.Known() || n.Unit != "s" || math.Abs(n.Value) < 120 {
		return n.String()
	}
	f, u := 60.0, "min"
	switch a := math.Abs(n.Value); {
	case a >= 2*86400:
		f, u = 86400, "days"
	case a >= 7200:
		f, u = 3600, "h"
	}
	n.Value, n.Low, n.High, n.Unit = n.Value/f, n.Low/f, n.High/f, u
	return n.String()
}

// some says whether any candidate has what a row of the table is about.
func some(cs []Candidate, what string) bool {
	return slices.ContainsFunc(cs, func(c Candidate) bool {
		return what == "speed" && c.Speed.Known() || what == "move" && c.FirstMove != ""
	})
}

func capital(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}

// view is what the template sees.
type view struct {
	*Dossier
	SeenFigures, CycleFigures, ReadingFigures, FitFigures, AdviceFigures []figure
	InUse                                                                []Candidate
	ReadingsShown, KeptShown                                             []Reading
}

// Local writes a time of the dossier in the site's zone.
func (v view) Local(t string) string {
	x, err := time.Parse(time.RFC3339Nano, t)
	if err != nil {
		return t
	}
	return x.In(v.zone).Format("2 Jan 2006 15:04")
}

// Zone names the zone of the times shown.
func (v view) Zone() string { return v.zone.String() }

// mostListed readings are listed; all are in the JSON.
const mostListed = 8

// HTML writes the page: one file, no scripts, no other host.
func (d *Dossier) HTML(w io.Writer) error {
	v := view{Dossier: d, SeenFigures: d.seenFigures(), CycleFigures: d.cycleFigures(), ReadingFigures: d.readingFigures(), FitFigures: d.fitFigures(), AdviceFigures: d.adviceFigures()}
	if d.Advice.InService != nil {
		v.InUse = append(v.InUse, *d.Advice.InService)
	}
	v.InUse = append(v.InUse, d.Advice.Candidates...)
	v.ReadingsShown = d.Readings
	if n := len(d.Readings); n > mostListed {
		v.ReadingsShown = d.Readings[n-mostListed:]
	}
	v.KeptShown = d.Kept[max(0, len(d.Kept)-mostListed):]
	if err := page.Execute(w, v); err != nil {
		return fmt.Errorf("writing the dossier of %s: %w", d.Loop, err)
	}
	return nil
}

// JSON writes the dossier for programs: every number with unit, range or count,
// or why there is none.
func (d *Dossier) JSON(w io.Writer) error {
	e := json.NewEncoder(w)
	e.SetEscapeHTML(false)
	e.SetIndent("", " ")
	if err := e.Encode(d); err != nil {
		return fmt.Errorf("writing the dossier of %s: %w", d.Loop, err)
	}
	return nil
}

// Trend writes the frames it was made from, as a trend CSV that replay and this
// read again.
func (d *Dossier) Trend(w io.Writer) error {
	c := trend.Columns{Flags: true}
	for i := range d.frames {
		f := &d.frames[i]
		c.Mode = c.Mode || f.Mode != 0
		c.Tuning = c.Tuning || f.Gain > 0 || f.Reset > 0
		c.Feedforward = c.Feedforward || f.Feedforward == f.Feedforward && d.loop.Feedforward != ""
		c.Position = c.Position || f.Position == f.Position && d.loop.Position != ""
	}
	t := trend.NewWriter(w, c)
	for i := range d.frames {
		if err := t.Write(d.Loop, &d.frames[i]); err != nil {
			return fmt.Errorf("writing the trend of %s: %w", d.Loop, err)
		}
	}
	return t.Flush()
}
