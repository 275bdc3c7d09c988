package configs

import (
	"bytes"
	"encoding/csv"
	"math/rand/v2"
	"strings"
	"testing"
)

// values are what a column may hold; columns that are not listed take texts.
var values = map[string][]string{
	"mode": {"m", "m & n"}, "mode_map": {"0=manual;1=auto", "0/0=manual;1/0=auto", "man=manual; aut = auto;"},
	"pv_low": {"0", "-40", "1e-3"}, "pv_high": {"100", "0.3", "1e6"}, "op_low": {"0", "4"}, "op_high": {"100", "20"},
	"op_limit_low": {"5", "4"}, "op_limit_high": {"19.5", "20"}, "sp_limit_low": {"0.01"}, "sp_limit_high": {"0.2"},
	"pv_alarm_low": {"0.1", "0.05"}, "pv_alarm_high": {"0.25"}, "action": actionWords,
	"gain": {"1", "0.3", "123.456789", "1e-3"}, "gain_unit": gainUnitWords, "reset": {"none", "2", "0.3333333", "1e3"},
	"reset_unit": resetUnits, "reset_s": {"30", "0.1", "none"}, "rate": {"0", "2.5"}, "rate_unit": rateUnits, "rate_s": {"0", "7"},
	"form": formWords, "scan_s": {"0.25"}, "sample_s": {"1", "60"}, "report": reportWords, "silence_s": {"600"},
	"pv_filter_s": {"0", "3"}, "sp_ramp": {"0", "0.1"}, "process": processWords, "element": elementWords, "stroke_s": {"0", "90"},
	"op_split": {"12"}, "inner": {""}, "was": {""}, "feedforward_kind": ffWords, "normal_mode": ModeWords, "duty": dutyWords,
	"offset_ok": {"0", "0.1"}, "recovery_s": {"300"}, "priority": priorityWords,
	"active_when":   {"a = 1", "'a b' != \"c d\" or x > 3", "works!nsu=urn:kf;s=x <= -0.5 and y = on"},
	"suppress_when": {"z >= 1 and z < 5"},
}

var texts = []string{"x", "residual, outlet", `pump "B"`, "#1", "°C", "a;b", "nsu=urn:kf;s=A B.PV", "'", `"`, "a!b", "=1+1", "ü ß"}

// Lists of columns in random order and choice read back equal when written.
func TestRandomListsReadBackEqual(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 2))
	loaded := 0
	const tries = 3000
	for range tries {
		header := []string{"loop"}
		for _, c := range columns[1:] {
			if rnd.Float64() < 0.25 {
				header = append(header, c.name)
			}
		}
		rnd.Shuffle(len(header), func(i, j int) { header[i], header[j] = header[j], header[i] })
		var b bytes.Buffer
		w := csv.NewWriter(&b)
		w.Write(header)
		for i := range 1 + rnd.IntN(3) {
			row := make([]string, len(header))
			for j, name := range header {
				switch v := values[name]; {
				case name == "loop":
					row[j] = "L" + string(rune('0'+i)) + texts[rnd.IntN(len(texts))]
				case rnd.Float64() < 0.2:
				case v != nil:
					row[j] = v[rnd.IntN(len(v))]
				default:
					// Different tags for different roles.
					row[j] = name + texts[rnd.IntN(len(texts))]
				}
			}
			w.Write(row)
		}
		w.Flush()
		loops, err := ReadLoopList(bytes.NewReader(b.Bytes()), "r.csv")
		if err != nil {
			continue // a combination that is refused
		}
		loaded++
		assertRoundTrip(t, loops)
		for _, l := range loops {
			if s := l.DescribeTuning(); strings.Contains(s, "NaN") || strings.Contains(s, "?") {
				t.Errorf("%s: %s", l.Name, s)
			}
		}
	}
	if loaded < tries/10 {
		t.Errorf("only %d of %d lists loaded: the test says little", loaded, tries)
	}
	t.Logf("%d of %d lists loaded", loaded, tries)
}
