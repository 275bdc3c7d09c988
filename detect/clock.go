package detect

import "math"

// Does a cycle keep time? What a clock drives (a pump sequence, a timer, a wave from
// outside) comes back to the same beat after every upset: its crossings jitter about a
// straight line. What a loop makes itself (a limit cycle, an instability kept up by
// noise) has no beat to come back to: each upset moves all later crossings, and the
// jitter adds up. In the words of frequency standards, white phase noise against a
// random walk of phase (Allan 1966, Statistics of atomic frequency standards, Proc.
// IEEE 54). With s the deviation of the crossings from the straight line and d that of
// the lengths, s / (d / sqrt 2) is 1 for a clock; for a random walk of n periods the
// deviation from its line is d * sqrt(n/15), so the ratio is sqrt(2n/15).
type clock struct {
	T0, P0           float64 // s, begin of the block and nominal period
	Last             float64 // s, last upward crossing
	X, Y, XX, XY, YY float32 // sums of the straight line; time less its nominal in periods
	L, LL            float32 // sums of the lengths of single periods, less the nominal one, in periods
	N, LN            uint16
	K                uint16  // periods since T0
	Was              float32 // ratio of the full blocks, the newest weighing most, 0 none
	Bank             uint8
	On               bool
}

const (
	clockBlock = 60   // periods after which the line begins anew: no source is steady for ever
	clockLeast = 16   // periods at least for a judgement
	clockKeeps = 1.12 // ratio under which a cycle of up to clockLong periods keeps time
	clockLong  = 40   // periods that make chance small
	// Jitter of a crossing, periods, that sampling and interpolation make by themselves:
	// under it nothing is known.
	clockBlur = 0.0015
)

// begin starts afresh for a cycle of a bank, unless one that keeps time there may still
// be on, after a gap or a spell in manual.
func (c *clock) begin(bank int, t, period float64) {
	if keeps, _ := c.beat(); keeps && int(c.Bank) == bank && math.Abs(math.Log(period/c.period())) < 0.1 && t-c.Last < 2*float64(c.K)*c.period() {
		return
	}
	*c = clock{Bank: uint8(bank), P0: period, On: true}
}

// period is the period as the line has it.
func (c *clock) period() float64 {
	b, _ := c.line()
	return c.P0 * (1 + b)
}

// line gives slope and mean square deviation of the line, in periods.
func (c *clock) line() (b, ms float64) {
	n := float64(c.N)
	if n < 4 {
		return 0, 0
	}
	sxx := float64(c.XX) - float64(c.X)*float64(c.X)/n
	sxy := float64(c.XY) - float64(c.X)*float64(c.Y)/n
	syy := float64(c.YY) - float64(c.Y)*float64(c.Y)/n
	b = sxy / sxx
	return b, max(0, syy-b*sxy) / (n - 2)
}

// cross takes an upward crossing at t, s.
func (c *clock) cross(t float64) {
	if c.N > 0 {
		p := c.period()
		k := math.Round((t - c.Last) / p)
		if k < 1 {
			return
		}
		if k > 1 && k > 2*float64(c.K) {
			*c = clock{Bank: c.Bank, P0: p, On: true, Was: c.Was} // too long ago to count through
		} else {
			if k == 1 {
				l := float32((t-c.Last)/c.P0 - 1)
				c.L += l
				c.LL += l * l
				c.LN++
			}
			c.K += uint16(k)
		}
	}
	if c.N == 0 {
		c.T0 = t
	}
	x := float64(c.K)
	y := (t-c.T0)/c.P0 - x
	c.Last = t
	c.N++
	c.X += float32(x)
	c.Y += float32(y)
	c.XX += float32(x * x)
	c.XY += float32(x * y)
	c.YY += float32(y * y)
	if c.K >= clockBlock {
		n := clock{Bank: c.Bank, P0: c.period(), Last: t, On: true, T0: t, N: 1}
		if _, jitter, ok := c.running(); ok && jitter > clockBlur {
			r, _ := c.known()
			n.Was = float32(r)
		}
		*c = n
	}
}

// running is the ratio over the running block and its jitter, periods; ok is false
// while it is too short.
func (c *clock) running() (r, jitter float64, ok bool) {
	if c.N < clockLeast || c.LN < clockLeast-4 {
		return 0, 0, false
	}
	n := float64(c.LN)
	v := (float64(c.LL) - float64(c.L)*float64(c.L)/n) / (n - 1)
	_, ms := c.line()
	jitter = max(math.Sqrt(max(v, 0)/2), clockBlur)
	return math.Sqrt(ms) / jitter, jitter, true
}

// known is the ratio as the running block has it along with those before, weighed (of its
// logarithm) by their periods, and the periods of a block for which it stands; 0 unknown.
// One block of chance may look like a beat, several do not.
func (c *clock) known() (r, n float64) {
	r, _, ok := c.running()
	switch n = float64(c.N); {
	case c.Was == 0 && !ok:
		return 0, 0
	case c.Was == 0:
		return r, n
	case !ok:
		return float64(c.Was), clockBlock
	}
	f := n / (n + clockBlock)
	return math.Pow(float64(c.Was), 1-f) * math.Pow(r, f), math.Pow(clockBlock, 1-f) * math.Pow(n, f)
}

// beat says whether the cycle keeps time, or surely does not; neither where it is
// not known yet.
func (c *clock) beat() (keeps, strays bool) {
	r, n := c.known()
	if n == 0 {
		return false, false
	}
	_, jitter, ok := c.running()
	// Between the two laws, on the scale of ratios, lies the root of the second. That of a
	// random walk grows with the root of the periods, and so does what it stays under by chance.
	keeps = r < clockKeeps*math.Sqrt(max(n/clockLong, 1)) && !(ok && jitter <= clockBlur)
	return keeps, r > math.Sqrt(math.Sqrt(2*n/15))
}

// plain: the ratio is that of a clock without regard to how many periods it rests on.
func (c *clock) plain() bool {
	r, n := c.known()
	return n > 0 && r < clockKeeps
}

// ringJitter is the jitter of a crossing, periods, that noise and loads do not give a loop
// which rings by itself at an even size: what keeps its size rings long, and what rings
// long keeps its phase from one cycle to the next.
const ringJitter = 0.015

// jitters says that crossings jitter as those of a loop which is pushed and damped; held is
// taken where nothing is known yet.
func (c *clock) jitters(held bool) bool {
	if _, jitter, ok := c.running(); ok {
		return jitter > ringJitter
	}
	return held
}

// judged says whether beat rests on anything.
func (c *clock) judged() bool {
	_, _, ok := c.running()
	return ok || c.Was > 0
}

// long says whether the judgement rests on so many periods that chance is out: a random
// walk of 40 stays under the limit of a clock in fewer than one of a hundred cases.
func (c *clock) long() bool { return c.Was > 0 || c.N >= clockLong }

// exact: the crossings lie on the line as well as sampling can show.
func (c *clock) exact() bool {
	_, jitter, ok := c.running()
	_, ms := c.line()
	return ok && jitter <= clockBlur && ms < 4*clockBlur*clockBlur
}
