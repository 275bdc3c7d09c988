package detect

// A cycle that loads outgrow. Where they step now and then they set what is usual of a loop,
// and a valve that begins to stick may make less of it for good. But what they make does not
// keep one length and size for so long, and e rests in between.

// What is asked of it.
const (
	aloneCertain = 2 * certain // twice as many nats: a chance of 4e-11
	aloneLeast   = 0.3         // %
	aloneNoise   = 2.5         // noise levels
	aloneShaped  = 4           // looks at a shape that tell it before a cause is judged
	aloneRests   = 0.4         // share of the time in which e rests, at most: a sine has 0.16, a triangle 0.25
	plainBeat    = 8.0         // regularity that nothing but a cycle has for long
)

// aloneLarge is its size at least, %.
func aloneLarge(sigma float64) float64 { return max(aloneLeast, aloneNoise*sigma) }

// evenest is the longest of the runs of newest half-cycles that show a cycle plainest by their
// evenness; that it is no larger than large counts against it. n is 0 where there are too few.
func (b *cycleBank) evenest(level int, large float64) (best ringStat, plain float64) {
	for n := fewest; n <= int(b.N); n++ {
		q, _ := b.stat(level, n)
		if x := plainness(&q, b.spread(n), large); best.n == 0 || x >= plain {
			best, plain = q, x
		}
	}
	return
}

// aloneAsked is the evidence, nats, by which a cycle of a period, s, at a level may be one by its
// evenness alone: its shape was looked at, and it is within what the loop's own dynamics may make
// or of a valve's shape, which counts for a part of it.
func (w *Watch) aloneAsked(level int, period float64) (nats float64, ok bool) {
	k := &w.s.Track
	rt, _ := w.resetS()
	switch {
	case !k.On || int(k.Bank) != level || k.Looks < 2:
		return 0, false
	case w.ofAValve(level):
		return 1.5 * certain * w.strict, true
	}
	return aloneCertain * w.strict, period < ownSlowest*rt
}

// ofAValve: the cycle that the track follows at a level has the shape that a sticking valve gives
// it. How long OP takes through its band is not bounded by the loop's own dynamics.
func (w *Watch) ofAValve(level int) bool {
	sh := w.shapes()
	_, regular, ok := w.s.Cycles[level].lengths(8)
	return ok && sh.looks >= aloneShaped && w.triangle(w.stickIndex(sh), sh, regular, false)
}

// alone: by its evenness alone it is a cycle.
func (w *Watch) alone(level int, b *cycleBank, period, usual, sigma float64) bool {
	nats, ok := w.aloneAsked(level, period)
	if !ok || b.tip() < aloneLarge(sigma)/2 || w.s.Track.Rests > aloneRests {
		return false
	}
	q, plain := b.evenest(level, largeInFew(usual, sigma))
	return q.n > 0 && q.amp > aloneLarge(sigma) && q.regular > plainBeat && plain > nats && w.steadySP(float64(q.n)/2*period)
}
