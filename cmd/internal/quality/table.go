package quality

import (
	"fmt"
	"io"
	"math"
	"slices"
	"sort"
	"strings"
	"text/tabwriter"

	"midwatch/detect"
)

// Score is what a family, or all of them, reached.
type Score struct {
	Family                   string
	Loops, Found, Subtle     int
	SubtleFound              int
	Right, Wrong, Open       int
	Extra, Early             int
	DelayMedian, Delay90     float64
	GainError, ResetError    float64 // medians, share
	GainRead, ResetRead      int     // loops with a reading
	Readable                 int
	Years                    float64
	False                    int
	ByKind                   map[detect.Kind]int
	LoopsWithFalse           int
	extraKinds, saidWrong    map[string]int
	delays, gErrors, rErrors []float64
	raised                   []float64
}

// Rate is false findings per loop-year and its 95 % upper bound (exact, Poisson).
func (s *Score) Rate() (rate, upper float64) {
	if s.Years == 0 {
		return math.NaN(), math.NaN()
	}
	return float64(s.False) / s.Years, poissonUpper(s.False) / s.Years
}

// poissonUpper is the mean whose chance of n or fewer is 5 %.
func poissonUpper(n int) float64 {
	lo, hi := 0.0, float64(n)*2+20
	for range 80 {
		m := (lo + hi) / 2
		p, term := 0.0, math.Exp(-m)
		for i := 0; i <= n; i++ {
			p += term
			term *= m / float64(i+1)
		}
		if p > 0.05 {
			lo = m
		} else {
			hi = m
		}
	}
	return lo
}

const yearS = 365.25 * 86400

func (s *Score) add(r *Result) {
	s.Loops++
	if s.ByKind == nil {
		s.ByKind, s.extraKinds, s.saidWrong = map[detect.Kind]int{}, map[string]int{}, map[string]int{}
	}
	if r.Healthy {
		s.Years += r.Seconds / yearS
		s.False += len(r.Extra)
		if len(r.Extra) > 0 {
			s.LoopsWithFalse++
		}
		for _, f := range r.Extra {
			s.ByKind[f.Kind]++
		}
	} else {
		switch {
		case r.Subtle:
			s.Subtle++
			if r.Found {
				s.SubtleFound++
			}
		case r.Found:
			s.Found++
		}
		if r.Found && !r.Subtle {
			s.delays = append(s.delays, r.DelayUnits)
		}
		if r.Found {
			switch r.Cause {
			case "right":
				s.Right++
			case "wrong":
				s.Wrong++
				s.saidWrong[string(r.Said)]++
			case "undetermined":
				s.Open++
			}
		}
		s.raised = append(s.raised, r.Raised...)
		s.Extra += len(r.Extra)
		s.Early += r.Early
		for _, f := range r.Extra {
			s.extraKinds[string(f.Kind)]++
		}
	}
	if r.HasTuning {
		s.Readable++
		if !math.IsNaN(r.GainSeen) {
			s.GainRead++
			s.gErrors = append(s.gErrors, math.Abs(r.GainSeen/r.GainTrue-1))
		}
		if !math.IsNaN(r.ResetSeen) {
			s.ResetRead++
			s.rErrors = append(s.rErrors, math.Abs(r.ResetSeen/r.ResetTrue-1))
		}
	}
}

func (s *Score) close() {
	s.DelayMedian, s.Delay90 = quantile(s.delays, 0.5), quantile(s.delays, 0.9)
	s.GainError, s.ResetError = quantile(s.gErrors, 0.5), quantile(s.rErrors, 0.5)
}

func quantile(v []float64, q float64) float64 {
	if len(v) == 0 {
		return math.NaN()
	}
	v = slices.Clone(v)
	sort.Float64s(v)
	return v[min(len(v)-1, int(q*float64(len(v))))]
}

// Missed is the share of clear faults that were not found.
func (s *Score) Missed() float64 {
	if n := s.Loops - s.Subtle; n > 0 {
		return float64(n-s.Found) / float64(n)
	}
	return 0
}

// Scores sums up by family, in order of the families, faults and healthy loops apart,
// and over all.
func Scores(results []Result) (faults, healthy []*Score, allFaults, allHealthy *Score) {
	by := map[string]*Score{}
	allFaults, allHealthy = &Score{Family: "all"}, &Score{Family: "all"}
	for i := range results {
		r := &results[i]
		s := by[r.Family]
		if s == nil {
			s = &Score{Family: r.Family}
			by[r.Family] = s
			if r.Healthy {
				healthy = append(healthy, s)
			} else {
				faults = append(faults, s)
			}
		}
		s.add(r)
		if r.Healthy {
			allHealthy.add(r)
		} else {
			allFaults.add(r)
		}
	}
	for _, s := range by {
		s.close()
	}
	allFaults.close()
	allHealthy.close()
	return faults, healthy, allFaults, allHealthy
}

func percent(a, b int) string {
	if b == 0 {
		return "-"
	}
	return fmt.Sprintf("%.0f", 100*float64(a)/float64(b))
}

func number(v float64, form string) string {
	if math.IsNaN(v) {
		return "-"
	}
	return fmt.Sprintf(form, v)
}

func counts[K ~string](m map[K]int) string {
	var keys []string
	for k := range m {
		keys = append(keys, string(k))
	}
	sort.Slice(keys, func(i, j int) bool {
		a, b := m[K(keys[i])], m[K(keys[j])]
		if a != b {
			return a > b
		}
		return keys[i] < keys[j]
	})
	var b strings.Builder
	for i, k := range keys {
		if i > 0 {
			b.WriteString(", ")
		}
		fmt.Fprintf(&b, "%s %d", k, m[K(k)])
	}
	return b.String()
}

// Table writes the whole score as text, the worst rows first.
func Table(w io.Writer, results []Result) {
	faults, healthy, all, allHealthy := Scores(results)
	sort.SliceStable(faults, func(i, j int) bool { return badness(faults[i]) > badness(faults[j]) })
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	if len(faults) > 0 {
		fmt.Fprintln(w, "Faults. Delay in cycles of the swing, else in recovery times. Cause: share of those found. Extra: findings not in the truth, (early) before the onset. Raised: how often one kind of one loop was, once being best: median, 90 % quantile, most.")
		fmt.Fprintln(t, "family\tloops\tfound %\tmissed\tsubtle (found)\tdelay p50\tp90\tcause right %\twrong\tundet.\textra (early)\traised p50/p90/most\tgain err %\treset err %\tread %\twrongly said; extra kinds")
		for _, s := range append(faults, all) {
			named := s.Right + s.Wrong + s.Open
			notes := counts(s.saidWrong)
			if x := counts(s.extraKinds); x != "" {
				notes = strings.TrimPrefix(notes+"; + "+x, "; ")
			}
			fmt.Fprintf(t, "%s\t%d\t%s\t%d\t%d (%d)\t%s\t%s\t%s\t%s\t%s\t%d (%d)\t%s/%s/%s\t%s\t%s\t%s\t%s\n", s.Family, s.Loops, percent(s.Found, s.Loops-s.Subtle),
				s.Loops-s.Subtle-s.Found, s.Subtle, s.SubtleFound, number(s.DelayMedian, "%.1f"), number(s.Delay90, "%.1f"),
				percent(s.Right, named), percent(s.Wrong, named), percent(s.Open, named), s.Extra, s.Early,
				number(quantile(s.raised, 0.5), "%.0f"), number(quantile(s.raised, 0.9), "%.0f"), number(quantile(s.raised, 1), "%.0f"),
				number(100*s.GainError, "%.1f"), number(100*s.ResetError, "%.1f"), percent(s.GainRead, s.Readable), notes)
		}
		t.Flush()
		if n := all.Right + all.Wrong; n > 0 {
			fmt.Fprintf(w, "causes: named in %s %% of those found, right in %s %% of those named\n", percent(n, n+all.Open), percent(all.Right, n))
		}
	}
	if len(healthy) > 0 {
		sort.SliceStable(healthy, func(i, j int) bool { a, _ := healthy[i].Rate(); b, _ := healthy[j].Rate(); return a > b })
		fmt.Fprintln(w, "\nHealthy. Rates are false findings per loop-year, with the 95 % upper bound.")
		fmt.Fprintln(t, "family\tloops\tloop-years\tfalse\trate\tbound\tloops with any\tgain err %\treset err %\tread %\tkinds")
		for _, s := range append(healthy, allHealthy) {
			rate, upper := s.Rate()
			fmt.Fprintf(t, "%s\t%d\t%.2f\t%d\t%.2f\t%.2f\t%d\t%s\t%s\t%s\t%s\n", s.Family, s.Loops, s.Years, s.False, rate, upper, s.LoopsWithFalse,
				number(100*s.GainError, "%.1f"), number(100*s.ResetError, "%.1f"), percent(s.GainRead, s.Readable), counts(s.ByKind))
		}
		t.Flush()
		speeds(w, results)
	}
	calibration(w, results)
	frames := 0
	for i := range results {
		frames += results[i].Frames
	}
	fmt.Fprintf(w, "%d scenarios, %.1f million frames\n", len(results), float64(frames)/1e6)
}

func badness(s *Score) float64 {
	named := float64(max(1, s.Right+s.Wrong+s.Open))
	return s.Missed() + float64(s.Wrong)/named + 0.3*float64(s.Open)/named + float64(s.Extra)/float64(max(1, s.Loops))
}

// speeds shows the nuisance of fast and slow loops apart.
func speeds(w io.Writer, results []Result) {
	by := map[float64]*Score{}
	var keys []float64
	for i := range results {
		r := &results[i]
		if !r.Healthy {
			continue
		}
		if by[r.EveryS] == nil {
			by[r.EveryS] = &Score{}
			keys = append(keys, r.EveryS)
		}
		by[r.EveryS].add(r)
	}
	sort.Float64s(keys)
	fmt.Fprint(w, "by recording interval:")
	for _, k := range keys {
		rate, upper := by[k].Rate()
		fmt.Fprintf(w, "  %gs %.1f y %.2f (<%.2f)", k, by[k].Years, rate, upper)
	}
	fmt.Fprintln(w)
}

// calibration holds confidence against what was right; false findings on healthy
// loops that name a cause count as wrong.
func calibration(w io.Writer, results []Result) {
	edges := []float64{0, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 1.0001}
	n, ok, sum := make([]int, len(edges)), make([]int, len(edges)), make([]float64, len(edges))
	total := 0
	for i := range results {
		for _, c := range results[i].Named {
			b := sort.SearchFloat64s(edges, c.Confidence+1e-9) - 1
			b = min(max(b, 0), len(edges)-2)
			n[b]++
			sum[b] += c.Confidence
			if c.Right {
				ok[b]++
			}
			total++
		}
	}
	if total == 0 {
		return
	}
	fmt.Fprintln(w, "\nCalibration of named causes (false findings before an onset or on healthy loops count as wrong).")
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, "confidence\tclaims\tmean said\tright %")
	for b := 0; b < len(edges)-1; b++ {
		if n[b] > 0 {
			fmt.Fprintf(t, "%.2f to %.2f\t%d\t%.2f\t%s\n", edges[b], min(edges[b+1], 1), n[b], sum[b]/float64(n[b]), percent(ok[b], n[b]))
		}
	}
	t.Flush()
}
