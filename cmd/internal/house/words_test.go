package house

import (
	"go/ast"
	"go/token"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// The words are a contract: other programs read them.
var (
	loopKinds = []string{"sustained-offset", "growing-oscillation", "sustained-oscillation", "sluggish-recovery", "output-saturation",
		"valve-sticking", "frozen-pv", "pv-at-range-end", "not-in-normal-mode", "shared-oscillation", "stale-data", "tuning-changed"}
	watchKinds = []string{"source-down", "source-late", "samples-lost", "store-failing", "sender-failing", "clock-step", "certificate-expiring"}
	causeWords = []string{"reset-too-short", "gain-too-high", "reset-too-long", "gain-too-low", "integral-missing", "valve-sticking",
		"valve-dead-band", "final-element-not-following", "process-nonlinear", "outside-disturbance", "output-limit", "wind-up",
		"measurement", "undetermined"}
	changeWords = []string{"tuning", "mode", "set-point", "op-by-hand", "op-at-limit", "data-gap"}
	eventWords  = []string{"raised", "updated", "cleared"}
	modeWords   = []string{"auto", "manual", "cascade", "remote-sp", "remote-output", "tracking", "out-of-service"}
)

// constants gives the values of all constants of a type in package detect.
func constants(t *testing.T, typ string) []string {
	t.Helper()
	var out []string
	for _, p := range list[pkg](t, "./detect") {
		for _, name := range p.GoFiles {
			for _, d := range parse(t, filepath.Join(p.Dir, name)).Decls {
				g, ok := d.(*ast.GenDecl)
				if !ok || g.Tok != token.CONST {
					continue
				}
				for _, s := range g.Specs {
					v := s.(*ast.ValueSpec)
					if id, ok := v.Type.(*ast.Ident); !ok || id.Name != typ {
						continue
					}
					for _, x := range v.Values {
						if w, _ := strconv.Unquote(x.(*ast.BasicLit).Value); w != "" {
							out = append(out, w)
						}
					}
				}
			}
		}
	}
	return out
}

func sorted(lists ...[]string) []string {
	all := slices.Concat(lists...)
	slices.Sort(all)
	return all
}

func TestWordsAreTheContract(t *testing.T) {
	var table []string
	for _, r := range detect.Table() {
		table = append(table, string(r.Kind))
	}
	for _, c := range []struct {
		what      string
		got, want []string
	}{
		{"kinds of detect", constants(t, "Kind"), sorted(loopKinds, watchKinds)},
		{"causes of detect", constants(t, "Cause"), causeWords},
		{"changes before a finding", constants(t, "ChangeWhat"), changeWords},
		{"events of detect", constants(t, "Event"), eventWords},
		{"kinds of configs", configs.Kinds, sorted(loopKinds, watchKinds)},
		// What several loops share is said by the site detectors.
		{"kinds of the table of detectors", append(table, string(detect.SharedOscillation)), loopKinds},
		{"modes of configs", configs.ModeWords, modeWords},
		{"modes of collector", collector.ModeWords[1:], modeWords},
	} {
		if d := cmp.Diff(sorted(c.want), sorted(c.got)); d != "" {
			t.Errorf("%s (-contract +code):\n%s", c.what, d)
		}
	}
}

// What check takes as a mode map, the collector takes, and the other way round.
func TestModeMapsAgree(t *testing.T) {
	agree := func(s string) {
		t.Helper()
		pairs, cerr := configs.CheckModeMap(s)
		m, err := collector.ParseModeMap(s)
		switch {
		case (cerr == nil) != (err == nil):
			t.Errorf("%q: configs says %v, collector says %v", s, cerr, err)
		case err == nil && pairs != m.Two():
			t.Errorf("%q: configs says pairs %v, collector %v", s, pairs, m.Two())
		}
	}
	for _, s := range []string{"", " ", ";", "0=manual", "0=manual;1=auto;2=cascade;16=tracking", "0/0=manual;1/0=auto", " 0 = manual ; 1 = auto ",
		"0=manual;", ";;0=manual", "0=Manual", "0=man", "0", "=auto", "0=", "0/0=manual;1=auto", "1=auto;0/0=manual", "a/b/c=auto",
		"MAN=manual;AUT=auto", "0==auto", "0=auto=manual", "/=auto", "0=auto;/=manual", "\t0=auto", "0=auto;\n1=manual", "0=auto\u00a0"} {
		agree(s)
	}
	pieces := []string{"0", "1", "16", "MAN", "/", "/", "=", "=", "=", ";", ";", " ", "auto", "manual", "tracking", "cascade", "Auto", "x", "é", "\t", "-1", "1e3"}
	r := rand.New(rand.NewPCG(2, 1))
	for range 20_000 {
		var b strings.Builder
		for range r.IntN(14) {
			b.WriteString(pieces[r.IntN(len(pieces))])
		}
		if agree(b.String()); t.Failed() {
			return
		}
	}
}
