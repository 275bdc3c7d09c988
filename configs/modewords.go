package configs

import "strings"

// ModeWords are the words of the modes, as the collector knows them.
var ModeWords = []string{"auto", "manual", "cascade", "remote-sp", "remote-output", "tracking", "out-of-service"}

// CheckModeMap says whether a mode_map is written well: "0=manual;1=auto", or
// pairs "0/0=manual;1/0=auto" for a mode given by two tags. Pairs is true for
// the second form. It takes exactly what the collector's reader takes.
func CheckModeMap(s string) (pairs bool, err error) {
	pairs, m := checkModeMap(s)
	if m != nil {
		return false, Problems{{What: m.what, Hint: m.hint}}
	}
	return pairs, nil
}

func checkModeMap(s string) (pairs bool, m *mistake) {
	const hint = "write VALUE=MODE, separated by semicolons, such as 0=manual;1=auto"
	first := true
	for entry := range strings.SplitSeq(s, ";") {
		entry = strings.TrimSpace(entry)
		if entry == "" {
			continue
		}
		k, v, ok := strings.Cut(entry, "=")
		if !ok {
			return pairs, wrong(hint, "%q: want VALUE=MODE", entry)
		}
		// The collector takes an empty word as "mode unknown".
		if w := strings.TrimSpace(v); w != "" {
			if _, m := word(w, ModeWords); m != nil {
				return pairs, wrong("modes are "+strings.Join(ModeWords, ", "), "%q is no mode", w)
			}
		}
		two := strings.Contains(strings.TrimSpace(k), "/")
		if !first && two != pairs {
			return pairs, wrong(hint, "%q: either all values are pairs or none", strings.TrimSpace(k))
		}
		pairs, first = two, false
	}
	return pairs, nil
}
