package quality

import "fmt"

// Bounds are the worst figures that a short bench may show: a regression breaks them,
// chance does not. Shares are of 1, errors are medians.
type Bounds struct {
	Missed           float64 // share of faults missed
	WrongOfNamed     float64 // share of named causes that are wrong
	Named            float64 // least share of found faults with a cause named
	FalsePerLoopYear float64 // of healthy loops
	GainError        float64
	ResetError       float64
	Read             float64 // least share of healthy loops with a tuning read
}

// Broken says which bounds the results break, a sentence each.
func (b Bounds) Broken(results []Result) (broken []string) {
	_, _, f, h := Scores(results)
	share := func(a, of int) float64 { return float64(a) / float64(max(of, 1)) }
	named := f.Right + f.Wrong
	rate, _ := h.Rate()
	most := func(what string, got, bound float64) {
		if !(got <= bound) {
			broken = append(broken, fmt.Sprintf("%s: %.3g, bound %.3g", what, got, bound))
		}
	}
	least := func(what string, got, bound float64) {
		if !(got >= bound) {
			broken = append(broken, fmt.Sprintf("%s: %.3g, at least %.3g asked", what, got, bound))
		}
	}
	most("share of faults missed", f.Missed(), b.Missed)
	most("share of named causes that are wrong", share(f.Wrong, named), b.WrongOfNamed)
	least("share of found faults with a cause named", share(named, named+f.Open), b.Named)
	most("false findings per healthy loop-year", rate, b.FalsePerLoopYear)
	most("median error of the gain read", h.GainError, b.GainError)
	most("median error of the reset read", h.ResetError, b.ResetError)
	least("share of healthy loops with a tuning read", share(h.GainRead, h.Readable), b.Read)
	return broken
}
