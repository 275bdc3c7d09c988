package detect_test

import (
	"bytes"
	"encoding/csv"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

// The recorded runs are of the process of Downs & Vogel (Computers and Chemical
// Engineering 17:245, 1993) under the control of Russell, Chiang & Braatz (2000);
// their NOTICE and truth lie beside them. Truth says what was done to which loop
// and when.
const recordedDir = "../testdata/te"

type truthRow struct {
	file, loop    string
	onset, end    int64 // ms UTC; end 0: the file's
	expect        []string
	cause         []string
	alsoOK        []string
	notOwnTuning  bool
	blameless     bool // "none" may be said
	anything      bool
	healthyRecord bool
}

func readTruth(t *testing.T) []truthRow {
	t.Helper()
	f, err := os.Open(filepath.Join(recordedDir, "truth.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	all, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	words := func(s string) []string {
		if s == "" {
			return nil
		}
		return strings.Split(s, "|")
	}
	at := func(s string) int64 {
		if s == "" {
			return 0
		}
		x, err := time.Parse(time.RFC3339, s)
		if err != nil {
			t.Fatal(err)
		}
		return x.UnixMilli()
	}
	var out []truthRow
	for _, r := range all[1:] {
		x := truthRow{file: r[0], loop: r[1], onset: at(r[2]), end: at(r[3]), expect: words(r[4]), cause: words(r[5]), alsoOK: words(r[6])}
		x.healthyRecord = x.loop == "*"
		x.anything = slices.Contains(x.expect, "any")
		x.blameless = slices.Contains(x.expect, "none") || x.anything
		if r[5] == "not a cause on its own tuning" {
			x.notOwnTuning, x.cause = true, nil
		}
		out = append(out, x)
	}
	return out
}

func recordedLoops(t *testing.T) []*configs.Loop {
	t.Helper()
	f, err := os.Open(filepath.Join(recordedDir, "loops-te.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	// The runs' list says "none" as a reset time; a loop list has a column for that.
	var b bytes.Buffer
	w := csv.NewWriter(&b)
	at := slices.Index(rows[0], "reset_s")
	for i, r := range rows {
		none := ""
		if i == 0 {
			none = "reset"
		} else if r[at] == "none" {
			r[at], none = "", "none"
		}
		if err := w.Write(append(r, none)); err != nil {
			t.Fatal(err)
		}
	}
	w.Flush()
	loops, err := configs.ReadLoopList(&b, "loops-te.csv")
	if err != nil {
		t.Fatal(err)
	}
	return loops
}

// replayFile gives the findings of all loops of a trend file, site findings too.
func replayFile(t *testing.T, path string, loops []*configs.Loop) []detect.Finding {
	t.Helper()
	r, err := trend.Open([]string{path}, loops, trend.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	var out []detect.Finding
	emit := func(f *detect.Finding) { out = append(out, *f) }
	ws := make([]*detect.Watch, len(loops))
	for i, l := range loops {
		ws[i] = detect.New(l, collector.LoopID(i), detect.Options{})
	}
	sites := detect.NewSites(loops)
	waiting := map[int64]map[collector.LoopID]detect.Evidence{}
	var done int64
	if err := r.Each(func(id collector.LoopID, f *collector.Frame) error {
		ws[id].Step(f, emit)
		if e, ok := ws[id].TakeEvidence(); ok {
			if waiting[e.Slot] == nil {
				waiting[e.Slot] = map[collector.LoopID]detect.Evidence{}
			}
			waiting[e.Slot][id] = e
		}
		// Frames are merged by time: what is a slot old is complete.
		if now := (f.Time/detect.SiteSlotMs - 1) * detect.SiteSlotMs; now > done {
			for id, e := range waiting[now] {
				sites.Record(id, e)
			}
			delete(waiting, now)
			sites.Slot(now, emit)
			done = now
		}
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return out
}

// said are the kinds that were open at some time in the window, with the last
// cause of each.
func said(fs []detect.Finding, loop string, from, to int64) (open []detect.Finding) {
	for _, f := range fs {
		if f.Loop == loop && f.Event != detect.Cleared && f.At >= from && (to == 0 || f.At <= to) {
			open = append(open, f)
		}
	}
	return
}

// What must be found and rightly named of the runs' six definite faults; a
// regression breaks it, and whoever finds more raises it.
const (
	leastFound = 4
	leastRight = 3
)

func TestRecordedRuns(t *testing.T) {
	loops := recordedLoops(t)
	truth := readTruth(t)
	files, err := filepath.Glob(filepath.Join(recordedDir, "*.csv.gz"))
	if err != nil || len(files) != 8 {
		t.Fatalf("%d recorded runs, %v", len(files), err)
	}
	definite, found, right := 0, 0, 0
	for _, path := range files {
		name := filepath.Base(path)
		t.Run(strings.TrimSuffix(name, ".csv.gz"), func(t *testing.T) {
			fs := replayFile(t, path, loops)
			known := map[string]truthRow{}
			onset := int64(0)
			for _, r := range truth {
				if r.file == name {
					known[r.loop] = r
					if onset == 0 || r.onset < onset {
						onset = r.onset
					}
				}
			}
			if len(known) == 0 {
				t.Fatal("no truth for this run")
			}
			keepsItsWord(t, fs)
			for _, f := range fs {
				if f.Event != detect.Cleared {
					innocent(t, f, known, onset)
				}
			}
			for _, r := range known {
				if r.healthyRecord || r.blameless {
					continue
				}
				definite++
				open := said(fs, r.loop, r.onset, r.end)
				hit, named := false, false
				for _, f := range open {
					if slices.Contains(r.expect, string(f.Kind)) {
						hit = true
						named = named || slices.Contains(r.cause, string(f.Cause))
					}
				}
				if hit {
					found++
				}
				if named {
					right++
				}
				if !hit || !named {
					t.Logf("%s: want %s by %s, said%s", r.loop, strings.Join(r.expect, " or "), strings.Join(r.cause, " or "), brief(open))
				}
			}
		})
	}
	t.Logf("%d definite faults, %d found, %d rightly named", definite, found, right)
	if definite != 6 || found < leastFound || right < leastRight {
		t.Errorf("of %d definite faults %d found and %d rightly named, want %d and %d", definite, found, right, leastFound, leastRight)
	}
}

// keepsItsWord: what a finding once said of a change of the tuning before it, it says until
// it is over, though the new tuning is the usual one by then.
func keepsItsWord(t *testing.T, fs []detect.Finding) {
	t.Helper()
	first := map[string]string{}
	for _, f := range fs {
		key := f.Loop + " " + string(f.Kind)
		if f.Event == detect.Cleared {
			delete(first, key)
			continue
		}
		text := ""
		for _, c := range f.Changed {
			if c.What == detect.ChangedTuning {
				text = c.Text
			}
		}
		if was := first[key]; was != "" && text == "" {
			t.Errorf("%s at %s no longer says %q: %s", key, detect.FormatTime(f.At), was, f.Text)
		}
		if text != "" {
			first[key] = text
		}
	}
}

// innocent fails when a finding blames somebody who did nothing.
func innocent(t *testing.T, f detect.Finding, known map[string]truthRow, onset int64) {
	t.Helper()
	_, healthy := known["*"]
	r, ok := known[f.Loop]
	what := f.Loop + brief([]detect.Finding{f})
	shared := f.Kind == detect.SharedOscillation
	switch {
	case healthy:
		t.Errorf("on a healthy run: %s", what)
	case f.At < onset:
		t.Errorf("before anything was done: %s", what)
	case ownTuning(f.Cause) && (!ok || r.notOwnTuning || !slices.Contains(r.cause, string(f.Cause))):
		t.Errorf("wrong cause: %s", what)
	case !ok || r.anything || shared || f.Kind == detect.TuningChanged:
	case f.Kind == detect.PVAtRangeEnd && r.loop == "te03": // its PV does fall to 0
	case !slices.Contains(r.expect, string(f.Kind)) && !slices.Contains(r.alsoOK, string(f.Kind)):
		t.Errorf("not in the truth: %s", what)
	}
}
