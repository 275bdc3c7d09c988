package quality

import (
	"bufio"
	"compress/gzip"
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// recordedTruth is a row of the recorded runs' truth.csv.
type recordedTruth struct {
	file, loop          string
	onset               int64
	expect, cause, also []string
	notTuning           bool // no cause on its own tuning may be named
	expectNone          bool
	expectAny           bool
	expectOrNone        bool
}

// RecordedScore is what was made of the recorded runs.
type RecordedScore struct {
	Rows             []RecordedRow
	Found, Expected  int
	CauseRight       int
	CauseWrong       int
	CauseOpen        int
	False            int // findings on loops and times without a fault
	HealthyLoopDays  float64
	FalseFindings    []string
	ForbiddenCauses  int
	ForbiddenDetails []string
}

// RecordedRow is one labelled loop.
type RecordedRow struct {
	File, Loop, Expect, Said string
	Found                    bool
	Cause                    string
	DelayH                   float64
}

func readLoops(path string) ([]*configs.Loop, error) {
	rows, err := readTable(path)
	if err != nil {
		return nil, err
	}
	var out []*configs.Loop
	for _, m := range rows {
		l := configs.NewLoop(m["loop"])
		num := func(k string, v *float64) {
			if x, e := strconv.ParseFloat(m[k], 64); e == nil {
				*v = x
			} else if m[k] != "" && m[k] != "none" && err == nil {
				err = fmt.Errorf("%s: loop %s: %s %q is no number", path, m["loop"], k, m[k])
			}
		}
		num("pv_low", &l.PVLow)
		num("pv_high", &l.PVHigh)
		num("op_low", &l.OPLow)
		num("op_high", &l.OPHigh)
		l.PVRangeGiven = m["pv_high"] != ""
		l.OPLimitLow, l.OPLimitHigh, l.SPLimitLow, l.SPLimitHigh = l.OPLow, l.OPHigh, l.PVLow, l.PVHigh
		l.Unit, l.Service = m["unit"], m["service"]
		switch m["action"] {
		case "reverse":
			l.Action = configs.Reverse
		case "direct":
			l.Action = configs.Direct
		}
		num("gain", &l.Gain)
		l.GainPct = l.Gain
		if m["reset_s"] == "none" {
			l.PropOnly = true
		} else {
			num("reset_s", &l.ResetS)
			l.Reset, l.IdealReset, l.ResetGiven = l.ResetS, l.ResetS, m["reset_s"] != ""
		}
		switch m["process"] {
		case "self-regulating":
			l.Process = configs.SelfRegulating
		case "integrating":
			l.Process = configs.Integrating
		}
		num("sample_s", &l.SampleS)
		if m["normal_mode"] != "" {
			l.NormalMode = m["normal_mode"]
		}
		out = append(out, l)
	}
	return out, err
}

func readTable(path string) ([]map[string]string, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	all, err := csv.NewReader(f).ReadAll()
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	if len(all) == 0 {
		return nil, fmt.Errorf("%s: empty", path)
	}
	var out []map[string]string
	for _, r := range all[1:] {
		m := map[string]string{}
		for i, k := range all[0] {
			if i < len(r) {
				m[k] = r[i]
			}
		}
		out = append(out, m)
	}
	return out, nil
}

func words(s string) []string {
	if s == "" {
		return nil
	}
	return strings.Split(s, "|")
}

func readTruth(path string) ([]recordedTruth, error) {
	rows, err := readTable(path)
	if err != nil {
		return nil, err
	}
	var out []recordedTruth
	for _, m := range rows {
		t := recordedTruth{file: m["file"], loop: m["loop"], expect: words(m["expect"]), also: words(m["also_ok"])}
		if m["onset"] != "" {
			at, err := time.Parse(time.RFC3339, m["onset"])
			if err != nil {
				return nil, fmt.Errorf("%s: %w", path, err)
			}
			t.onset = at.UnixMilli()
		}
		t.expectAny = slices.Contains(t.expect, "any")
		t.expectOrNone = slices.Contains(t.expect, "none") || slices.Contains(t.also, "none")
		t.expectNone = len(t.expect) == 1 && t.expect[0] == "none"
		if strings.HasPrefix(m["cause"], "not a cause on its own tuning") || strings.Contains(m["note"], "must never be called") {
			t.notTuning = true
		}
		if !strings.HasPrefix(m["cause"], "not ") {
			t.cause = words(m["cause"])
		}
		out = append(out, t)
	}
	return out, nil
}

// readTrend hands over the rows of a trend CSV (gzip or not), in their order.
func readTrend(path string, emit func(loop string, f *collector.Frame)) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	defer f.Close()
	var r io.Reader = bufio.NewReaderSize(f, 1<<18)
	if strings.HasSuffix(path, ".gz") {
		z, err := gzip.NewReader(r)
		if err != nil {
			return fmt.Errorf("%s: %w", path, err)
		}
		r = z
	}
	c := csv.NewReader(r)
	c.ReuseRecord = true
	head, err := c.Read()
	if err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	col := map[string]int{}
	for i, k := range head {
		col[strings.Clone(k)] = i
	}
	num := func(s string) float32 {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			return collector.NaN32
		}
		return collector.Clean32(v)
	}
	for {
		row, err := c.Read()
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return fmt.Errorf("%s: %w", path, err)
		}
		at, err := time.Parse(time.RFC3339Nano, row[col["time"]])
		if err != nil {
			return fmt.Errorf("%s: %w", path, err)
		}
		fr := collector.Frame{Time: at.UnixMilli(), PV: num(row[col["pv"]]), SP: num(row[col["sp"]]), OP: num(row[col["op"]]),
			Feedforward: collector.NaN32, Position: collector.NaN32}
		if k, ok := col["mode"]; ok {
			fr.Mode, _ = collector.ParseMode(row[k])
		}
		emit(row[col["loop"]], &fr)
	}
}

// Recorded scores the recorded runs in dir (truth.csv, loops-te.csv, *.csv.gz).
func Recorded(dir string) (*RecordedScore, error) {
	truths, err := readTruth(filepath.Join(dir, "truth.csv"))
	if err != nil {
		return nil, err
	}
	var files []string
	for _, t := range truths {
		if !slices.Contains(files, t.file) {
			files = append(files, t.file)
		}
	}
	sc := &RecordedScore{}
	for _, file := range files {
		loops, err := readLoops(filepath.Join(dir, "loops-te.csv"))
		if err != nil {
			return nil, err
		}
		id := map[string]collector.LoopID{}
		watches := make([]*detect.Watch, len(loops))
		first, last := make([]int64, len(loops)), make([]int64, len(loops))
		atEnd := make([]int64, len(loops)) // when PV first came to an end of its range
		for i, l := range loops {
			id[l.Name] = collector.LoopID(i)
			watches[i] = detect.New(l, collector.LoopID(i), detect.Options{})
		}
		sites := detect.NewSites(loops)
		heard := newListener()
		slot := int64(0)
		err = readTrend(filepath.Join(dir, file), func(name string, f *collector.Frame) {
			k, ok := id[name]
			if !ok {
				return
			}
			if first[k] == 0 {
				first[k] = f.Time
			}
			last[k] = f.Time
			if l := loops[k]; float64(f.PV) <= l.PVLow+0.005*l.PVSpan() || float64(f.PV) >= l.PVHigh-0.005*l.PVSpan() {
				if atEnd[k] == 0 {
					atEnd[k] = f.Time
				}
			}
			watches[k].Step(f, func(f *detect.Finding) { sites.Hear(f, heard.hear) })
			if ev, ok := watches[k].TakeEvidence(); ok {
				sites.Record(k, ev)
			}
			if end := (f.Time - 60_000) / detect.SiteSlotMs * detect.SiteSlotMs; end > slot {
				slot = end
				sites.Slot(end, heard.hear)
			}
		})
		if err != nil {
			return nil, err
		}
		scoreRecorded(sc, file, truths, loops, first, last, atEnd, heard)
	}
	return sc, nil
}

var tuningCauses = []string{"reset-too-short", "gain-too-high", "reset-too-long", "gain-too-low"}

func scoreRecorded(sc *RecordedScore, file string, truths []recordedTruth, loops []*configs.Loop, first, last, atEnd []int64, heard *listener) {
	episodes := heard.episodes()
	for i, l := range loops {
		if first[i] == 0 {
			continue
		}
		var t *recordedTruth
		for k := range truths {
			if truths[k].file == file && (truths[k].loop == l.Name) {
				t = &truths[k]
			}
		}
		until := last[i]
		if t != nil {
			until = t.onset
		}
		sc.HealthyLoopDays += float64(until-first[i]) / 86400e3
		row := RecordedRow{File: file, Loop: l.Name, DelayH: math.NaN()}
		for _, e := range episodes {
			group := e.last.Kind == detect.SharedOscillation && slices.Contains(e.last.Loops, l.Name)
			if e.last.Loop != l.Name && !group || aboutData(e.last.Kind) {
				continue
			}
			kind, cause := string(e.last.Kind), string(e.last.Cause)
			if group && sharedAllowed(truths, file, e.last.Loops) { // judged where it is labelled
				continue
			}
			if kind == string(detect.PVAtRangeEnd) && atEnd[i] > 0 && e.raised >= atEnd[i] {
				continue // it was there
			}
			line := fmt.Sprintf("%s %s: %s %s %.2f at %s", file, l.Name, kind, cause, e.last.Confidence, detect.FormatTime(e.raised))
			if t == nil || e.raised < t.onset {
				sc.False++
				sc.FalseFindings = append(sc.FalseFindings, line)
				continue
			}
			row.Said += kind + "(" + cause + ") "
			if t.notTuning && slices.Contains(tuningCauses, cause) && e.last.Loop == l.Name {
				sc.ForbiddenCauses++
				sc.ForbiddenDetails = append(sc.ForbiddenDetails, line)
			}
			expected := slices.Contains(t.expect, kind) || t.expectAny
			if !expected && !slices.Contains(t.also, kind) {
				if t.expectNone || !slices.Contains([]string{"tuning-changed"}, kind) {
					sc.False++
					sc.FalseFindings = append(sc.FalseFindings, line+" (other kind)")
				}
				continue
			}
			if expected {
				if !row.Found {
					row.Found = true
					row.DelayH = float64(e.raised-t.onset) / 3600e3
				}
				switch {
				case len(t.cause) == 0 || cause == "":
				case cause == "undetermined":
					if row.Cause == "" {
						row.Cause = cause
					}
				case slices.Contains(t.cause, cause):
					if row.Cause != "wrong" {
						row.Cause = "right"
					}
				case slices.Contains(tuningCauses, cause) || kind != string(detect.TuningChanged):
					row.Cause = "wrong"
				}
			}
		}
		if t == nil {
			continue
		}
		row.Expect = strings.Join(t.expect, "|")
		if !t.expectOrNone && !t.expectAny {
			sc.Expected++
			if row.Found {
				sc.Found++
			}
		}
		switch row.Cause {
		case "right":
			sc.CauseRight++
		case "wrong":
			sc.CauseWrong++
		case "undetermined":
			sc.CauseOpen++
		}
		sc.Rows = append(sc.Rows, row)
	}
}

// sharedAllowed says whether a member of the group may swing with others.
func sharedAllowed(truths []recordedTruth, file string, members []string) bool {
	for _, t := range truths {
		if t.file == file && slices.Contains(members, t.loop) && (slices.Contains(t.also, string(detect.SharedOscillation)) || slices.Contains(t.expect, "any")) {
			return true
		}
	}
	return false
}

// ScoreRecorded writes the score of the recorded runs.
func ScoreRecorded(w io.Writer, dir string) error {
	sc, err := Recorded(dir)
	if err != nil {
		return err
	}
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, "run\tloop\texpected\tfound\tdelay h\tcause\tsaid")
	for _, r := range sc.Rows {
		fmt.Fprintf(t, "%s\t%s\t%s\t%v\t%s\t%s\t%s\n", strings.TrimSuffix(r.File, ".csv.gz"), r.Loop, r.Expect, r.Found, number(r.DelayH, "%.2f"), r.Cause, r.Said)
	}
	t.Flush()
	fmt.Fprintf(w, "found %d of %d; causes right %d, wrong %d, undetermined %d; forbidden tuning causes %d; false %d in %.1f healthy loop-days\n",
		sc.Found, sc.Expected, sc.CauseRight, sc.CauseWrong, sc.CauseOpen, sc.ForbiddenCauses, sc.False, sc.HealthyLoopDays)
	for _, f := range append(sc.ForbiddenDetails, sc.FalseFindings...) {
		fmt.Fprintln(w, "  "+f)
	}
	return nil
}
