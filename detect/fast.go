package detect

// A cycle of few samples has a period near that of what the first bank makes of noise
// alone, and a lively loop makes a narrow band of its noise: for a while either is as
// regular as a cycle. A cycle is what stays so. It costs little to wait: a hundred
// half-cycles are a few hundred samples here.
const (
	fewSlots  = 12   // samples a period
	fastRaise = 7.0  // regularity over the ring
	fastOwn   = 10.0 // of the usual size, which such a cycle may have taught from the start
	fastHold  = 80   // half-cycles for which it must hold
	fastFails = 4    // of them that one without it takes back
	fastGrow  = 12   // and for growth
	fastKeeps = 4.0  // regularity over eight half-cycles that a live one keeps
	fastBad   = 20   // half-cycles without it that count
)

// fast: the bank sees a cycle of few samples, period in samples of the level.
func fast(level int, period float64) bool { return level == 0 && period <= fewSlots }

// Noise alone, or a lively loop's own, taught the usual size and cannot be told from it by
// waiting alone; what is far beyond both need not wait (Rayleigh's law: the size of a narrow
// band of noise is beyond 2.4 times its upper quartile once in three thousand times).
const (
	loudUsual = 4.0 // of the usual size
	loudNoise = 6.0 // noise levels
)

// drowned: a cycle of few samples that noise may have made.
func (w *Watch) drowned(level int, b *cycleBank, st ringStat) bool {
	if !fast(level, st.period) {
		return false
	}
	sigma := w.s.Noise.beside(st.amp, st.period)
	return !(w.usualKnown(b) && w.s.Noise.known() && b.tip() > max(loudUsual*b.Usual.Value(), loudNoise*sigma)*w.strict)
}

// countFast counts half-cycles for which a cycle of few samples holds.
func (w *Watch) countFast(level int, b *cycleBank) {
	_, regular, ok := b.lengths(ringLen)
	plain := ok && regular >= fastRaise*w.strict
	if plain && regular < fastOwn*w.strict && w.usualKnown(b) {
		q, _ := b.stat(level, ringLen)
		plain = q.amp >= 2*b.Usual.Value()
	}
	if !plain {
		b.Kept = max(b.Kept, fastFails) - fastFails
		return
	}
	b.Kept = min(b.Kept+1, fastHold)
}
