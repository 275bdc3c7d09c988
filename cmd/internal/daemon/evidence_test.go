package daemon

import (
	"bytes"
	"testing"
)

// In short, a decision shows what is new, what went past its limit or moved since the one
// before, each below the line it belongs to; whole, everything.
func TestEvidenceInShort(t *testing.T) {
	first := []string{
		"cycle of 2 min: ±0.2 %",
		"  does it grow: 7 times its scatter (asked 5), 2 times larger (asked 1.5)",
		"cycle of 2 min: ±0.4 %",
		"  does it grow: 3 times its scatter (asked 5), 2 times larger (asked 1.5)",
		"recovery at 2026-01-04T02:31:10.000Z: 40 s, 2.1 times the usual (asked 1.5)",
		"SP swings by 0.1 %",
		"tuning in service: gain 1.02 (0.97 to 1.07)",
	}
	second := []string{
		"cycle of 2 min: ±0.22 %",
		"  does it grow: 20 times its scatter (asked 5), 2 times larger (asked 1.5)", // as before: past its limit
		"cycle of 2 min: ±0.45 %",
		"  does it grow: 6 times its scatter (asked 5), 2 times larger (asked 1.5)",   // past it now
		"recovery at 2026-01-04T02:35:10.000Z: 40 s, 2.1 times the usual (asked 1.5)", // another
		"SP swings by 0.3 %",                          // moved
		"tuning in service: gain 1.05 (0.97 to 1.07)", // as before
	}
	show := func(whole bool) string {
		var b bytes.Buffer
		e := evidenceLog{w: &b, whole: whole}
		e.decided("first", first)
		b.Reset()
		e.decided("second", second)
		return b.String()
	}
	want := "second\n"
	for _, i := range []int{2, 3, 4, 5} {
		want += "  " + second[i] + "\n"
	}
	if got := show(false); got != want+"  (3 more as before, or nearly)\n" {
		t.Errorf("in short\n%swant\n%s", got, want)
	}
	want = "second\n"
	for _, line := range second {
		want += "  " + line + "\n"
	}
	if got := show(true); got != want {
		t.Errorf("whole\n%swant\n%s", got, want)
	}
}
