// Package dossier gathers what a tuning session needs to know of one loop, from
// its recorded frames and what the watch found: what was seen, whether
// measurement, final element or outside come first, the tuning in service, the
// process where its moves show it, candidates with their reasons, and before and
// after of tuning changes. It changes nothing, and says of every number its
// unit, range or count, and of what it could not compute, why.
//
// [Build] makes the value, [Dossier.HTML], [Dossier.JSON] and [Dossier.Trend]
// write it. There is no clock in it: all times are those of the data, but for
// the one it is told it was made at.
package dossier

import (
	"iter"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/alert/dossier/tune"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// Form is the version of the JSON.
const Form = 1

// Input is what a dossier is made from.
type Input struct {
	Loop     *configs.Loop
	Frames   iter.Seq2[collector.Frame, error] // oldest first
	Findings []detect.Finding                  // of all loops, any order; nil: the dossier judges the loop itself, and sees no other loop
	Others   bool                              // Findings speak of other loops too
	Partners []Partner                         // loops that hang together with this one
	From, To int64                             // the span asked for, ms UTC; 0: what the frames span
	Detect   detect.Options
	Made     time.Time      // when it was made; zero: not said
	Zone     *time.Location // of the times in the page; nil: UTC
	Site     string
	Version  string          // of the program
	Source   string          // where the frames are from, in words
	Sums     []Sum           // check sums of the files read
	Sessions []alert.Session // of tuning of this loop, with what the watch made of them
	Notes    []alert.Remark  // of people on this loop
	Kept     []Kept          // readings of the tuning in service that a running watch wrote down, oldest first; they may reach back before the span
	AsLeft   string          // the tuner's own record of what was changed, where there is one
}

// Told takes what the desk of a watch told of the loop, and of others.
func (in *Input) Told(p alert.Past) {
	h := p.Loops[in.Loop.Name]
	in.Findings = append([]detect.Finding{}, h.Findings...)
	for i := range p.Newest {
		// Under its former name it is no other loop.
		if f := &p.Newest[i]; f.Loop != in.Loop.Name && (f.Loop != in.Loop.Was || f.Loop == "") {
			in.Findings = append(in.Findings, *f)
		}
	}
	in.Others, in.Sessions, in.Notes = true, h.Sessions, h.Notes
}

// Note is what a person left written of the loop.
type Note struct {
	At   string `json:"at"` // wall clock
	Who  string `json:"who"`
	Text string `json:"text"`
}

// Partner is another loop that this one hangs together with.
type Partner struct {
	Loop      string  `json:"loop"`
	Relation  string  `json:"relation"` // "inner", "outer", "shares its output", ...
	RecoveryS float64 `json:"-"`        // usual recovery, s; NaN or 0 unknown
	Recovery  Number  `json:"recovery"`
}

// Sum is the check sum of a file that was read.
type Sum struct {
	Name   string `json:"name"`
	SHA256 string `json:"sha256"`
}

// Dossier is all that was gathered.
type Dossier struct {
	Form    int    `json:"form"`
	Loop    string `json:"loop"`
	Service string `json:"service,omitempty"`
	Area    string `json:"area,omitempty"`
	Site    string `json:"site,omitempty"`
	Made    string `json:"made,omitempty"`
	Source  string `json:"source,omitempty"`
	Summary []Line `json:"summary"` // the dossier in a few sentences, in the order to think

	Span       Span      `json:"span"`
	Identity   []Fact    `json:"identity"`
	Partners   []Partner `json:"partners,omitempty"`
	BlindSpots []string  `json:"blind_spots,omitempty"`
	Cautions   []string  `json:"cautions"`

	Episodes   []Episode `json:"episodes"`
	Cycles     []Cycle   `json:"cycles"`
	Recoveries []Fact    `json:"recoveries"`
	Conduct    []Fact    `json:"conduct"`

	Element []Fact   `json:"measurement_and_final_element"`
	ByHand  []string `json:"check_by_hand"`

	Outside []Fact `json:"outside"`

	Tuning    []Fact    `json:"tuning_in_service"`
	Readings  []Reading `json:"tuning_readings"`
	Kept      []Reading `json:"tuning_kept,omitempty"` // by the running watch, also before the span
	Scheduled []Fact    `json:"scheduled_gain,omitempty"`

	Process Process `json:"process"`
	Advice  Advice  `json:"candidates"`

	Changes []Change `json:"before_and_after"`
	AsLeft  string   `json:"as_left,omitempty"`
	Notes   []Note   `json:"notes,omitempty"` // oldest first

	Appendix Appendix `json:"appendix"`

	zone   *time.Location
	loop   *configs.Loop
	frames []collector.Frame
	s      *series
	fitted *fitted
	now    tune.Tuning // in service
	known  bool        // now is
}

// Line is one sentence of the summary.
type Line struct {
	About string `json:"about"`
	Text  string `json:"text"`
}

// Span is what the frames cover.
type Span struct {
	From     string   `json:"from"`
	To       string   `json:"to"`
	Days     float64  `json:"days"`
	Frames   int      `json:"frames"`
	Sample   Number   `json:"sample_interval"`
	Complete Number   `json:"complete"`
	Gaps     int      `json:"gaps"`
	Longest  Number   `json:"longest_gap"`
	Notes    []string `json:"notes,omitempty"`
}

// Episode is one finding of the watch from its rise to its end.
type Episode struct {
	Kind       detect.Kind     `json:"kind"`
	Since      string          `json:"since"`
	Raised     string          `json:"raised"`
	Cleared    string          `json:"cleared,omitempty"` // empty: still open at the end
	Cause      detect.Cause    `json:"cause,omitempty"`
	Confidence float64         `json:"confidence"`
	Also       []detect.Cause  `json:"also_possible,omitempty"`
	Measures   detect.Measures `json:"measures,omitempty"`
	Text       string          `json:"text"`

	since, end int64
	told       int64   // time of the text, ms
	growth     float64 // the largest heard of, a cycle; 0 none
}

// Says is the cause in words; empty where none is named.
func (e Episode) Says() string {
	switch e.Cause.ToTell(e.Kind) {
	case detect.NoCause:
		return ""
	case detect.Undetermined:
		return "the cause cannot be told"
	}
	return strings.ReplaceAll(string(e.Cause), "-", " ") + ", " + detect.Likely(e.Confidence)
}

// Cycle is a spell in which the loop swung.
type Cycle struct {
	From       string `json:"from"`
	To         string `json:"to"`
	Period     Number `json:"period"`
	Cycles     Number `json:"cycles"`
	Amplitude  Number `json:"amplitude"` // of PV
	SP         Number `json:"amplitude_sp"`
	OP         Number `json:"amplitude_op"`
	Growth     Number `json:"growth_per_cycle"`
	Regularity Number `json:"regularity"`          // mean over deviation of half-cycle lengths
	Harmonic3  Number `json:"third_harmonic_op"`   // of the first: triangle 0.11, square 0.33
	Shape      Number `json:"sine_triangle_index"` // 0 sine, 1 triangle
	InManual   string `json:"in_manual"`           // what a natural manual spell said of it

	from, to int64
	periodS  float64
}

// Reading is the tuning in service at a time.
type Reading struct {
	At    string `json:"at"`
	Gain  Number `json:"gain"`
	Reset Number `json:"reset"`
	AtOP  Number `json:"at_op"`
	Tags  bool   `json:"from_tags,omitempty"`

	at   int64
	atPV float64
}

// Appendix holds what is needed to check the dossier.
type Appendix struct {
	Indices  []Fact      `json:"published_indices"`
	Others   []Candidate `json:"other_rules"`
	Methods  []Method    `json:"methods"`
	Settings []Fact      `json:"settings"`
	Sums     []Sum       `json:"check_sums,omitempty"`
	Version  string      `json:"version,omitempty"`
	Engine   int         `json:"detection_engine"`
}

// Method is how something was computed and where that is from.
type Method struct {
	What   string `json:"what"`
	How    string `json:"how"`
	Source string `json:"source"`
}
