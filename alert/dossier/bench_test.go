package dossier_test

import (
	"io"
	"testing"

	"midwatch/alert/dossier"
)

// A week at 1 s, everything included: the watch over it, fit, candidates, page,
// JSON and trend.
func BenchmarkWeekAtOneSecond(b *testing.B) {
	w := quietWeek()
	fs := w.frames()
	for b.Loop() {
		d, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(fs)})
		if err != nil {
			b.Fatal(err)
		}
		for _, f := range []func(io.Writer) error{d.HTML, d.JSON, d.Trend} {
			if err := f(io.Discard); err != nil {
				b.Fatal(err)
			}
		}
	}
}
