package detect

import (
	"testing"

	"midwatch/configs"
)

// Whatever a detector claims in turn, an episode says little: a cause that changes back
// and forth ends undetermined.
func TestEpisodeDoesNotFlap(t *testing.T) {
	turns := map[string]struct {
		a, b claim
		want Cause
	}{
		"two causes":      {claim{On: true, Cause: causeIndex(IntegralMissing), Conf: 0.93}, claim{On: true, Cause: causeIndex(GainTooLow), Conf: 0.85}, Undetermined},
		"now and then":    {claim{On: true, Cause: causeIndex(IntegralMissing), Conf: 0.93}, claim{On: true, Cause: causeIndex(Undetermined), Conf: 0.6}, Undetermined},
		"more, less sure": {claim{On: true, Cause: causeIndex(OutputLimit), Conf: 0.9}, claim{On: true, Cause: causeIndex(OutputLimit), Conf: 0.75}, OutputLimit},
		"wind-up again":   {claim{On: true, Cause: causeIndex(OutputLimit), Conf: 0.9}, claim{On: true, Cause: causeIndex(WindUp), Conf: 0.85}, WindUp},
	}
	for name, x := range turns {
		w := New(&configs.Loop{Name: "FIC-316"}, 0, Options{})
		n := 0
		w.emit = func(*Finding) { n++ }
		for i := range 200 {
			c := x.a
			if i%2 == 1 {
				c = x.b
			}
			w.settle(kOffset, float64(i), &c, false, &openFinding{})
		}
		if n < 2 || n > 10 {
			t.Errorf("%s: said %d times", name, n)
		}
		if got := causes[w.s.Open[kOffset].Cause]; got != x.want {
			t.Errorf("%s: ends as %s, want %s", name, got, x.want)
		}
	}
}
