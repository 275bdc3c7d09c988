package api

import (
	"math"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/detect"
)

// Status is the state of the watch: the answer of /api/status and of the verb
// status. Times are RFC 3339, but for those within sources, senders and shelves,
// which are ms UTC.
type Status struct {
	Running  bool                    `json:"running"` // false: read from the data folder, no daemon runs
	Version  string                  `json:"version,omitempty"`
	Site     string                  `json:"site"`
	Started  string                  `json:"started,omitempty"`
	Now      string                  `json:"now,omitempty"`
	Well     bool                    `json:"well"`
	Unwell   []string                `json:"unwell,omitempty"` // why
	Loops    LoopCounts              `json:"loops"`
	Sources  []collector.SourceState `json:"sources,omitempty"`
	Parts    []Part                  `json:"parts,omitempty"`
	Trends   Trends                  `json:"trends"`
	Senders  []alert.SenderState     `json:"senders,omitempty"`
	Counts   map[string]uint64       `json:"counts,omitempty"`
	Shelves  []alert.Shelf           `json:"shelves,omitempty"`
	Episodes []Episode               `json:"episodes,omitempty"` // open, most urgent first
}

// LoopCounts are the counts of loops by state; the four add up to Total.
type LoopCounts struct {
	Total       int `json:"total"`
	Judged      int `json:"judged"`
	CannotJudge int `json:"cannot_judge"`
	NotNormal   int `json:"not_in_normal_mode"`
	Held        int `json:"held"`
	CatchingUp  int `json:"catching_up"` // of the four, not caught up since the start
}

// Add counts a loop.
func (c *LoopCounts) Add(s detect.State) {
	c.Total++
	switch s {
	case detect.Judged:
		c.Judged++
	case detect.NotNormal:
		c.NotNormal++
	case detect.HeldState:
		c.Held++
	default:
		c.CannotJudge++
	}
}

// Part is a part of the watch and how long ago it last turned, in seconds.
type Part struct {
	Name  string  `json:"name"`
	AgeS  float64 `json:"age_s"`
	State string  `json:"state"`
}

// Trends is the trend store.
type Trends struct {
	Bytes   int64  `json:"bytes"`
	Limit   int64  `json:"limit_bytes"`
	Frames  uint64 `json:"frames_written"`
	Dropped uint64 `json:"frames_dropped"`
	Oldest  string `json:"oldest,omitempty"`
	Flushed string `json:"flushed,omitempty"`
	Problem string `json:"problem,omitempty"`
}

// Episode is an episode as the list shows it: what alert keeps, and how it
// stands.
type Episode struct {
	ID       string         `json:"id"`
	State    alert.State    `json:"state"`
	Open     bool           `json:"open"`
	Urgency  alert.Urgency  `json:"urgency,omitempty"`
	Why      string         `json:"why,omitempty"` // of the urgency
	Since    string         `json:"since"`
	Raised   string         `json:"raised"`
	Cleared  string         `json:"cleared,omitempty"`
	Count    int            `json:"count"`
	Standing bool           `json:"standing,omitempty"`
	Loops    []string       `json:"loops,omitempty"`
	Ack      *alert.Mark    `json:"ack,omitempty"`
	Shelf    *alert.Mark    `json:"shelf,omitempty"`
	Hold     *alert.Hold    `json:"hold,omitempty"`
	Finding  detect.Finding `json:"finding"` // the one that leads
}

// Episodes lists the episodes of a desk, most urgent first.
func Episodes(d Desk) []Episode {
	all := d.Episodes()
	out := make([]Episode, 0, len(all))
	for i := range all {
		if all[i].Into == "" {
			out = append(out, newEpisode(d, &all[i]))
		}
	}
	return out
}

func newEpisode(d Desk, e *alert.Episode) Episode {
	x := Episode{ID: e.ID, State: e.State(), Open: e.Open(), Since: detect.FormatTime(e.Since), Raised: detect.FormatTime(e.Raised),
		Count: e.Count, Standing: e.Standing, Loops: e.Loops(), Ack: e.Ack, Shelf: e.Shelf, Hold: e.Hold, Finding: e.Lead()}
	if x.Open {
		x.Urgency, x.Why = d.Urgency(e)
	} else if e.Cleared != 0 {
		x.Cleared = detect.FormatTime(e.Cleared)
	}
	return x
}

// Loop is a row of /api/loops.
type Loop struct {
	Loop    string       `json:"loop"`
	Service string       `json:"service,omitempty"`
	Area    string       `json:"area,omitempty"`
	Source  string       `json:"source,omitempty"`
	State   detect.State `json:"state"`
	Why     string       `json:"why,omitempty"`
	Blind   []string     `json:"blind_spots,omitempty"`
}

// Loops makes the rows of /api/loops.
func Loops(all []LoopState) []Loop {
	out := make([]Loop, 0, len(all))
	for _, l := range all {
		out = append(out, Loop{l.Loop.Name, l.Loop.Service, l.Loop.Area, l.Loop.Source, l.State, l.Why, l.Blind})
	}
	return out
}

// LoopView is what the watch knows of a loop.
type LoopView struct {
	Loop       string           `json:"loop"`
	State      detect.State     `json:"state"`
	Why        string           `json:"why,omitempty"`
	BlindSpots []string         `json:"blind_spots,omitempty"`
	Last       *Frame           `json:"last,omitempty"`
	SampleS    *float64         `json:"sample_s,omitempty"`
	NoisePV    *float64         `json:"noise_pv,omitempty"`
	TimeScaleS *float64         `json:"time_scale_s,omitempty"`
	PeriodS    *float64         `json:"period_s,omitempty"`
	Gain       *float64         `json:"gain,omitempty"` // in service, %/%
	GainLow    *float64         `json:"gain_low,omitempty"`
	GainHigh   *float64         `json:"gain_high,omitempty"`
	ResetS     *float64         `json:"reset_s,omitempty"`
	ResetLow   *float64         `json:"reset_s_low,omitempty"`
	ResetHigh  *float64         `json:"reset_s_high,omitempty"`
	LagS       *float64         `json:"lag_s,omitempty"` // of the controller beside its law
	Schedule   []GainPoint      `json:"gain_schedule,omitempty"`
	TuningNote string           `json:"tuning_note,omitempty"` // what of the loop list contradicts the data
	Open       []detect.Finding `json:"open,omitempty"`
}

// GainPoint is a point of a gain that goes with PV.
type GainPoint struct {
	PV       float64 `json:"pv"`
	Gain     float64 `json:"gain"` // %/%
	Readings int     `json:"readings"`
}

// Frame is the newest frame of a loop.
type Frame struct {
	Time string   `json:"time"`
	PV   *float64 `json:"pv,omitempty"`
	SP   *float64 `json:"sp,omitempty"`
	OP   *float64 `json:"op,omitempty"`
	Mode string   `json:"mode,omitempty"`
}

func known(v float64) *float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return &v
}

func newLoopView(name string, v *detect.View) LoopView {
	x := LoopView{Loop: name, State: v.State, Why: v.Why, BlindSpots: v.BlindSpots, Open: v.Open,
		NoisePV: known(v.NoisePV), TimeScaleS: known(v.TimeScaleS), PeriodS: known(v.PeriodS),
		Gain: known(v.GainPct), GainLow: known(v.GainLow), GainHigh: known(v.GainHigh),
		ResetS: known(v.ResetS), ResetLow: known(v.ResetLow), ResetHigh: known(v.ResetHigh), LagS: known(v.LagS), TuningNote: v.TuningNote}
	for _, p := range v.Schedule {
		x.Schedule = append(x.Schedule, GainPoint{p.PV, p.Gain, p.N})
	}
	if v.SampleS > 0 {
		x.SampleS = known(v.SampleS)
	}
	if v.Last.Time != 0 {
		x.Last = &Frame{detect.FormatTime(v.Last.Time), known(float64(v.Last.PV)), known(float64(v.Last.SP)), known(float64(v.Last.OP)), v.Last.Mode.String()}
	}
	return x
}
