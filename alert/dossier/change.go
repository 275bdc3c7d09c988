package dossier

import (
	"fmt"
	"iter"
	"math"

	"gonum.org/v1/gonum/stat/distuv"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// Change is a tuning change and what came of it.
type Change struct {
	At      string   `json:"at"`
	Before  string   `json:"tuning_before"`
	After   string   `json:"tuning_after"`
	Verdict string   `json:"verdict"`
	Holds   bool     `json:"holds_statistically"`
	Ratio   Number   `json:"deviation_after_over_before"`
	Facts   []Fact   `json:"facts"`
	Like    []string `json:"unlike,omitempty"`
	Enough  bool     `json:"enough_data"`
	Watch   string   `json:"verdict_of_the_watch,omitempty"` // made by itself some time after the change
}

// leastBlocks on each side of a change.
const leastBlocks = 8

// told is the verdict that the watch came to by itself of a change at a time.
func (in *Input) told(at int64) string {
	const near = int64(3600e3)
	for _, s := range in.Sessions {
		if o := s.Outcome; o.At != 0 && at >= s.First-near && at <= s.Last+near {
			so := "so far, "
			if o.Settled {
				so = ""
			}
			return fmt.Sprintf("%s%s (data to %s)", so, o.Verdict, in.at(o.At).Format("2 Jan 2006 15:04"))
		}
	}
	return ""
}

// mostSide is how much is looked at on each side of a change, s.
const mostSide = 14 * 86400

// mostCompared frames are held of a comparison; of more, every second one goes,
// again and again.
const mostCompared = 250_000

// Compare looks at a loop before the first and after the last change of a session
// of tuning (ms UTC): same mode, like load, same duty. Frames are those around
// them, oldest first; they are read once and most are not kept. An error is of
// reading them.
func Compare(l *configs.Loop, frames iter.Seq2[collector.Frame, error], first, last int64, o detect.Options) (Change, error) {
	w := newWatching(l, o)
	var kept []collector.Frame
	n, every := 0, 1
	for f, err := range frames {
		if err != nil {
			return Change{}, fmt.Errorf("frames of loop %s: %w", l.Name, err)
		}
		w.step(&f)
		if n%every == 0 {
			kept = append(kept, f)
		}
		n++
		if len(kept) == mostCompared {
			every *= 2
			for i := range mostCompared / 2 {
				kept[i] = kept[2*i]
			}
			kept = kept[:mostCompared/2]
		}
	}
	c := Change{At: detect.FormatTime(last), Ratio: none("not enough data yet"), Verdict: "not enough data yet: no frames around the change"}
	if len(kept) > 1 {
		s := newSeries(l, kept)
		seen := w.end()
		c = s.compare(first, last, s.t0, s.at(s.n()), s.cycles(seen, nil))
	}
	c.Before, c.After = "as before", "as after"
	return c, nil
}

// side is one side of a change.
type side struct {
	rms    []float64 // ln of rms deviation of PV from SP, blocks
	spWay  float64   // % an hour
	opSD   float64   // %, of block means: what the load asked of OP
	opMean float64
	travel float64 // % an hour
	hours  float64
}

func (x side) load() Number {
	if len(x.rms) < 2 {
		return none("fewer than two blocks with the law acting")
	}
	return counted(x.opSD, len(x.rms), "%")
}

// blockS is the length of a block: long against the loop, so that blocks are
// nearly independent.
func (s *series) blockS(a, b int) float64 {
	// The time after which the error has forgotten itself: first zero crossing of
	// its autocovariance, over means of ten samples.
	var x []float64
	const m = 10
	for k := a; k+m <= b && len(x) < 6000; k += m {
		if v := mean(s.sp, k, k+m) - mean(s.pv, k, k+m); v == v && s.law[k] && s.law[k+m-1] {
			x = append(x, v)
		}
	}
	mu := mean(x, 0, len(x))
	forget := 1
	for ; forget < len(x)/4; forget++ {
		c := 0.0
		for k := forget; k < len(x); k++ {
			c += (x[k] - mu) * (x[k-forget] - mu)
		}
		if c <= 0 {
			break
		}
	}
	return math.Max(float64(forget*m)*s.dt*3, 120*s.dt)
}

func (s *series) side(a, b int, blockS float64) side {
	var out side
	m := max(20, int(blockS/s.dt))
	var ops []float64
	for k := a; k+m <= b; k += m {
		sum, n, ok := 0.0, 0, true
		for j := k; j < k+m; j++ {
			e := s.sp[j] - s.pv[j]
			ok = ok && s.law[j]
			if e == e {
				sum += e * e
				n++
			}
			if j > k {
				if d := math.Abs(s.sp[j] - s.sp[j-1]); d == d {
					out.spWay += d
				}
				if d := math.Abs(s.op[j] - s.op[j-1]); d == d {
					out.travel += d
				}
			}
		}
		if !ok || n < m/2 {
			continue
		}
		out.rms = append(out.rms, math.Log(math.Sqrt(sum/float64(n))+1e-9))
		if u := mean(s.op, k, k+m); u == u {
			ops = append(ops, u)
		}
	}
	out.hours = float64(b-a) * s.dt / 3600
	if out.hours > 0 {
		out.spWay /= out.hours
		out.travel /= out.hours
	}
	out.opMean = mean(ops, 0, len(ops))
	for _, u := range ops {
		out.opSD += (u - out.opMean) * (u - out.opMean) / math.Max(1, float64(len(ops)-1))
	}
	out.opSD = math.Sqrt(out.opSD)
	return out
}

// swung is the share of the slots from i to j in which the loop swung.
func (s *series) swung(cs []Cycle, i, j int) float64 {
	n := 0
	for _, c := range cs {
		n += max(0, min(j, s.slot(c.to))-max(i, s.slot(c.from)))
	}
	return float64(n) / float64(max(1, j-i))
}

// compare holds the stretch from a to the first change against that from the last
// one to b.
func (s *series) compare(first, last, a, b int64, cs []Cycle) Change {
	c := Change{At: detect.FormatTime(last), Ratio: none("not enough data yet")}
	was, is := s.slot(first), s.slot(last)
	most := int(mostSide / s.dt)
	i, j := max(0, s.slot(a), was-most), min(s.n(), s.slot(b), is+most)
	if i >= was || is >= j {
		c.Verdict = "not enough data yet: the change lies at the edge of the span"
		return c
	}
	block := s.blockS(i, j)
	settle := min(int(block/s.dt), (j-is)/10) // what the change itself stirred up
	before, after := s.side(i, was, block), s.side(is+settle, j, block)
	n0, n1 := len(before.rms), len(after.rms)
	pv := func(x side) Number {
		if len(x.rms) == 0 {
			return none("no block with the law acting")
		}
		return counted(s.pvUnits(math.Exp(mean(x.rms, 0, len(x.rms)))), len(x.rms), s.unit())
	}
	c.Facts = []Fact{
		fact("deviation_before", "deviation of PV, rms, before", pv(before), fmt.Sprintf("geometric mean over blocks of %s", duration(block))),
		fact("deviation_after", "after", pv(after), ""),
		fact("travel_before", "OP travel before", number(before.travel, "% an hour"), ""),
		fact("travel_after", "after", number(after.travel, "% an hour"), ""),
		fact("load_before", "OP from block to block, before", before.load(), "what the load asked of it"),
		fact("load_after", "after", after.load(), ""),
		fact("op_before", "mean OP before", number(before.opMean, "%"), ""),
		fact("op_after", "after", number(after.opMean, "%"), ""),
	}
	// A swing says more than its size: it asks for movement of OP by itself, so
	// the two sides could never look alike.
	if w0, w1 := s.swung(cs, i, was), s.swung(cs, is, j); w0 < 0.05 && w1 > 0.2 {
		c.Holds, c.Enough, c.Verdict = true, true, fmt.Sprintf("the loop swings since the change: %s of the time after it, %s before", percent(w1), percent(w0))
		return c
	} else if w0 > 0.2 && w1 < 0.02 && n1 >= leastBlocks {
		c.Holds, c.Enough, c.Verdict = true, true, fmt.Sprintf("the swing that was there before the change is gone: %s of the time before, %s after", percent(w0), percent(w1))
		return c
	}
	if n0 < leastBlocks || n1 < leastBlocks {
		c.Verdict = fmt.Sprintf("not enough data yet: %d blocks of %s before and %d after with the law acting; %d of each are needed", n0, duration(block), n1, leastBlocks)
		return c
	}
	c.Enough = true
	unlike := func(what string, x, y, floor float64) {
		x, y = math.Max(x, floor), math.Max(y, floor)
		if q := y / x; q > 2 || q < 0.5 {
			c.Like = append(c.Like, fmt.Sprintf("%s was %s times that before", what, short(q)))
		}
	}
	unlike("set-point movement", before.spWay, after.spWay, 0.5)
	unlike("what the load asked of OP", before.opSD, after.opSD, 0.5)
	if math.Abs(after.opMean-before.opMean) > 15 {
		c.Like = append(c.Like, fmt.Sprintf("mean OP moved by %s %%: another operating point", short(after.opMean-before.opMean)))
	}
	d, se, df := welch(before.rms, after.rms)
	t := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: df}.Quantile(0.95)
	c.Ratio = ranged(math.Exp(d), math.Exp(d-t*se), math.Exp(d+t*se), "")
	c.Ratio.N = n0 + n1
	switch {
	case len(c.Like) > 0:
		c.Verdict = "no verdict: the two sides are not alike"
	case c.Ratio.High < 0.95:
		c.Holds, c.Verdict = true, fmt.Sprintf("PV keeps closer to SP since the change: deviation %s times that before (90 %% range %s to %s)", short(c.Ratio.Value), short(c.Ratio.Low), short(c.Ratio.High))
	case c.Ratio.Low > 1.05:
		c.Holds, c.Verdict = true, fmt.Sprintf("PV strays further from SP since the change: deviation %s times that before (90 %% range %s to %s)", short(c.Ratio.Value), short(c.Ratio.Low), short(c.Ratio.High))
	default:
		c.Verdict = fmt.Sprintf("no difference that holds: deviation %s times that before (90 %% range %s to %s)", short(c.Ratio.Value), short(c.Ratio.Low), short(c.Ratio.High))
	}
	return c
}

// welch gives the difference of two means with its standard error and degrees of
// freedom, variances unequal.
func welch(a, b []float64) (d, se, df float64) {
	va, vb := variance(a)/float64(len(a)), variance(b)/float64(len(b))
	d = mean(b, 0, len(b)) - mean(a, 0, len(a))
	se = math.Sqrt(va + vb)
	df = (va + vb) * (va + vb) / (va*va/float64(len(a)-1) + vb*vb/float64(len(b)-1))
	if !(df >= 1) {
		df = 1
	}
	return d, se, df
}

func variance(x []float64) float64 {
	m, v := mean(x, 0, len(x)), 0.0
	for _, y := range x {
		v += (y - m) * (y - m)
	}
	return v / float64(max(1, len(x)-1))
}
