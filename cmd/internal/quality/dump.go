package quality

import (
	"bufio"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// List writes the families and what they hold.
func List(w io.Writer) {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	for _, fs := range [][]family{faultFamilies, healthyFamilies} {
		for _, f := range fs {
			kind := "fault"
			if f.healthy {
				kind = "healthy"
			}
			fmt.Fprintf(t, "%s\t%s\t%s\n", kind, f.name, f.what)
		}
	}
	t.Flush()
}

// IsHealthy says whether a family is one of healthy loops.
func IsHealthy(name string) bool {
	return slices.ContainsFunc(healthyFamilies, func(f family) bool { return f.name == name })
}

// Details writes a line for all that went wrong: how to see it again, what was true
// and what was said.
func Details(w io.Writer, results []Result) {
	for i := range results {
		r := &results[i]
		var said []string
		if !r.Healthy && !r.Found {
			word := "MISSED"
			if r.Subtle {
				word = "missed (subtle)"
			}
			said = append(said, word)
		}
		if r.Cause == "wrong" {
			said = append(said, "CAUSE "+string(r.Said))
		}
		for _, f := range r.Extra {
			said = append(said, fmt.Sprintf("FALSE %s %s %.2f at %s", f.Kind, f.Cause, f.Confidence, detect.FormatTime(f.At)))
		}
		if len(said) > 0 {
			fmt.Fprintf(w, "%s #%d: %s\n", r.Family, r.Index, strings.Join(said, "; "))
		}
	}
}

// One runs one scenario of each matching family and writes what is true of it and
// all that was said, as JSON lines.
func One(w io.Writer, o Options, index int) error {
	for _, fs := range [][]family{faultFamilies, healthyFamilies} {
		for i := range fs {
			if o.Match != nil && !o.Match(fs[i].name) {
				continue
			}
			s := fs[i].make(o.Seed, o.Hold, index, o.Days)
			if err := OneCase(w, s.asCase(), o.Nuisance); err != nil {
				return err
			}
			fmt.Fprintf(w, "# error ratio %.1f\n", s.ratio(s.truth.member))
		}
	}
	return nil
}

// OneCase runs one case and writes what is true of it and all that was said.
func OneCase(w io.Writer, c *Case, nuisance float64) error {
	enc := json.NewEncoder(w)
	fmt.Fprint(w, c.About)
	r := Judge(c, nuisance)
	for _, f := range r.Findings {
		if err := enc.Encode(f); err != nil {
			return err
		}
	}
	_, err := fmt.Fprintf(w, "# found %v (subtle %v), delay %.1f, cause %s, extra %d; tuning true %.4g %.4g seen %.4g %.4g\n",
		r.Found, r.Subtle, r.DelayUnits, r.Cause, len(r.Extra), r.GainTrue, r.ResetTrue, r.GainSeen, r.ResetSeen)
	return err
}

// describe says what a scenario holds.
func describe(s *scenario) string {
	var b strings.Builder
	t := s.truth
	fmt.Fprintf(&b, "# %s #%d: %.1f h, onset %s (%.1f h), unit %.4g s, kinds %v also %v causes %v soft %v\n", s.family.name, s.index, s.duration/3600,
		detect.FormatTime(s.epoch+int64(t.onset*1000)), t.onset/3600, t.unit, t.kinds, t.also, t.causes, t.soft)
	for _, l := range s.rigs {
		fmt.Fprintf(&b, "#  %s: class %d k %.4g lags %.4g theta %.4g; Kc %.4g Ti %.4g Td %.4g velocity %v b %g filter %.3g; scan %g every %g; Ku %.4g Pu %.4g recovery %.4g; noise %.3g OU %.3g/%.3g step %.3g each %.4g SP %.3g each %.4g; pvQ %.3g opQ %.3g late %.2g deadband %.2g mode %v\n",
			l.name, l.proc.class, l.proc.k, l.proc.lags, l.proc.theta, l.law.kc, l.law.ti, l.law.td, l.law.velocity, l.law.spWeight, l.law.filter, l.h, l.rec.every,
			l.ku, l.pu, l.recovery, l.sensor.sigma, l.load.ou, l.load.ouTime, l.load.stepSize, l.load.stepEvery, l.sp.reach, l.sp.every,
			l.rec.pvQ, l.rec.opQ, l.rec.opLate, l.rec.deadband, l.rec.modeKnown)
	}
	return b.String()
}

// Dump writes one scenario as trend.csv, loops.csv and truth.txt.
func Dump(o Options, index int, dir string) error {
	for _, fs := range [][]family{faultFamilies, healthyFamilies} {
		for i := range fs {
			if o.Match(fs[i].name) {
				return DumpCase(fs[i].make(o.Seed, o.Hold, index, o.Days).asCase(), dir)
			}
		}
	}
	return fmt.Errorf("no family matches; hint: -list shows them")
}

// DumpCase writes one case as trend.csv, loops.csv and truth.txt.
func DumpCase(c *Case, dir string) (err error) {
	if err := os.WriteFile(filepath.Join(dir, "truth.txt"), []byte(c.About), 0o644); err != nil {
		return err
	}
	if err := dumpLoops(filepath.Join(dir, "loops.csv"), c.Rows); err != nil {
		return err
	}
	f, err := os.Create(filepath.Join(dir, "trend.csv"))
	if err != nil {
		return err
	}
	defer func() {
		if e := f.Close(); err == nil {
			err = e
		}
	}()
	w := bufio.NewWriterSize(f, 1<<20)
	fmt.Fprintln(w, "time,loop,pv,sp,op,mode,flags,gain,reset_s")
	num := func(b []byte, v float32) []byte {
		b = append(b, ',')
		if v == v {
			b = strconv.AppendFloat(b, float64(v), 'g', -1, 32)
		}
		return b
	}
	var b []byte
	c.Frames(func(i int, fr *collector.Frame) {
		b = append(b[:0], detect.FormatTime(fr.Time)...)
		b = append(append(b, ','), c.Rows[i].Name...)
		b = num(num(num(b, fr.PV), fr.SP), fr.OP)
		b = append(append(b, ','), fr.Mode.String()...)
		b = append(b, ',')
		first := true
		for k, word := range collector.FlagWords {
			if fr.Flags&(1<<k) != 0 {
				if !first {
					b = append(b, '+')
				}
				b, first = append(b, word...), false
			}
		}
		for _, v := range []float32{fr.Gain, fr.Reset} {
			if v == 0 {
				v = collector.NaN32
			}
			b = num(b, v)
		}
		b = append(b, '\n')
		_, err2 := w.Write(b)
		if err == nil {
			err = err2
		}
	})
	if err != nil {
		return err
	}
	return w.Flush()
}

func dumpLoops(path string, rows []*configs.Loop) error {
	var b strings.Builder
	w := csv.NewWriter(&b)
	head := []string{"loop", "pv_low", "pv_high", "op_limit_low", "op_limit_high", "action", "gain", "reset_s", "rate_s", "form", "process", "element", "inner", "stroke_s", "op_split", "normal_mode", "duty", "scan_s", "sample_s", "report", "sp_ramp"}
	if err := w.Write(head); err != nil {
		return err
	}
	num := func(v float64) string {
		if math.IsNaN(v) {
			return ""
		}
		return strconv.FormatFloat(v, 'g', -1, 64)
	}
	for _, r := range rows {
		reset := num(r.ResetS)
		if r.PropOnly {
			reset = "none"
		}
		err := w.Write([]string{r.Name, num(r.PVLow), num(r.PVHigh), num(r.OPLimitLow), num(r.OPLimitHigh),
			[...]string{"", "reverse", "direct"}[r.Action], num(r.Gain), reset, num(r.RateS), [...]string{"ideal", "series", "parallel"}[r.Form],
			[...]string{"", "self-regulating", "integrating", "runaway"}[r.Process], r.Element, r.Inner, num(r.StrokeS), num(r.OPSplit), r.NormalMode,
			[...]string{configs.Tight: "tight", configs.Averaging: "averaging", configs.GapDuty: "gap", configs.Batch: "batch", configs.StartStop: "start-stop", configs.Ratio: "ratio", configs.Selector: "selector", configs.Standby: "standby"}[r.Duty],
			num(r.ScanS), num(r.SampleS), [...]string{"periodic", "exception"}[r.Report], num(r.SPRamp)})
		if err != nil {
			return err
		}
	}
	w.Flush()
	if err := w.Error(); err != nil {
		return err
	}
	return os.WriteFile(path, []byte(b.String()), 0o644)
}
