package daemon

import (
	"slices"
	"testing"

	"midwatch/configs"
	"midwatch/detect"
)

// What a loop says of a swing waits until the groups of its time are known, over a restart,
// too; what groups have no say in does not.
func TestWordsOfSwingsWaitForTheGroups(t *testing.T) {
	loops := []*configs.Loop{configs.NewLoop("FIC-1"), configs.NewLoop("FIC-2")}
	at := int64(1767225600000)
	word := func(k detect.Kind, at int64) *said {
		return &said{Finding: detect.Finding{Subject: detect.Subject{Loop: "FIC-2"}, ID: 1, Loop: "FIC-2", Kind: k, Event: detect.Raised, At: at, Since: at, Confidence: 0.8}}
	}
	var out []detect.Kind
	emit := func(s *said) { out = append(out, s.Kind) }
	g := newGathering(loops)
	g.hear(word(detect.ValveStickingKind, at+2000), emit)
	g.hear(word(detect.SustainedOscillation, at+1000), emit)
	g.hear(word(detect.SustainedOffset, at+3000), emit)
	if want := []detect.Kind{detect.SustainedOffset}; !slices.Equal(out, want) {
		t.Fatalf("at once: %q, want %q", out, want)
	}
	b, err := g.save()
	if err != nil {
		t.Fatal(err)
	}
	if g = newGathering(loops); g.load(b) != nil {
		t.Fatal("its memory is not taken")
	}
	for _, x := range []struct {
		until int64
		want  []detect.Kind
	}{
		{at + 999, nil},
		{at + 1000, []detect.Kind{detect.SustainedOscillation}},
		{at + 1999, nil},
		{at + 2000, []detect.Kind{detect.ValveStickingKind}},
		{at + 9000, nil},
	} {
		out = nil
		if g.advance(x.until, emit); !slices.Equal(out, x.want) {
			t.Errorf("up to %d ms: %q, want %q", x.until-at, out, x.want)
		}
	}
	g.hear(word(detect.ValveStickingKind, at+10_000), emit)
	end := word(detect.ValveStickingKind, at+11_000)
	end.Event, end.Reason, end.last = detect.Cleared, detect.OutOfService, true
	if g.hear(end, emit); len(out) != 2 {
		t.Errorf("%d findings of a loop that is gone, want both", len(out))
	}
}

// Of what a loop says at one time the word that ends for a newer one is passed on last.
func TestWordThatEndsForANewerOneIsLast(t *testing.T) {
	at := int64(1767225600000)
	g := newGathering([]*configs.Loop{configs.NewLoop("FIC-1")})
	var out []detect.Event
	emit := func(s *said) { out = append(out, s.Event) }
	f := detect.Finding{Subject: detect.Subject{Loop: "FIC-1"}, Loop: "FIC-1", Kind: detect.SustainedOscillation, Event: detect.Cleared, Reason: detect.Rejudged, At: at}
	g.hear(&said{Finding: f}, emit)
	f.Kind, f.Event, f.Reason = detect.ValveStickingKind, detect.Raised, ""
	g.hear(&said{Finding: f}, emit)
	if g.advance(at, emit); !slices.Equal(out, []detect.Event{detect.Raised, detect.Cleared}) {
		t.Errorf("passed on as %q", out)
	}
}
