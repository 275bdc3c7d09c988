package detect

// What speaks for, and what against, a swing of a loop's own making.

// unevenGrowth is the deviation of the ln of peaks about their growth from which on that is not
// of an instability, which grows by the same factor each cycle. The envelope of a resonance of
// quality Q that chance drives changes by sqrt(pi/Q), of its usual size, from peak to peak: by
// half at 10, by a fifth at 80.
const unevenGrowth = 0.2

// stretch is the factor on the period of the first naming from which on a lag says nothing of
// the tuning.
const stretch = 1.3

// bolder: the tuning became more aggressive in the day before the cycle began.
func (w *Watch) bolder() bool {
	m := w.tuningBefore(w.s.Osc.Since)
	up := m.GainWas > 0 && m.GainNow > boldGain*m.GainWas
	cut := m.ResetWas > 0 && m.ResetNow < boldReset*m.ResetWas
	return up && !(m.ResetWas > 0 && m.ResetNow > 2*m.ResetWas) || cut && !(m.GainWas > 0 && m.GainNow < m.GainWas)
}

// boldGain and boldReset are the factors from which on a gain was raised and a reset time cut.
const (
	boldGain  = 1.4
	boldReset = 0.65
)
