package detect

import "fmt"

func (w *Watch) Rings() {
	for l := range w.levels() {
		b := &w.s.Cycles[l]
		fmt.Printf("L%d h=%.0f usual %.3f n%d conf %d:", l, w.levelS(l), b.Usual.Value(), b.N, b.Conf)
		for i := int(b.N) - 1; i >= 0; i-- {
			fmt.Printf(" %.1f/%.2f", b.at(i).length(), b.at(i).peak())
		}
		fmt.Println()
	}
}

// Dbg prints where a decision came from.
var Dbg = func(string, ...any) {}
