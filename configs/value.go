package configs

import (
	"math"
	"regexp"
	"strconv"
	"strings"
	"time"
	"unicode"
)

// maxDuration keeps sums and conversions of durations far from overflow.
const maxDuration = 100 * 365 * 24 * time.Hour

var units = map[string]time.Duration{"ms": time.Millisecond, "s": time.Second, "m": time.Minute,
	"h": time.Hour, "d": 24 * time.Hour, "w": 7 * 24 * time.Hour}

var durationPart = regexp.MustCompile(`^(\d+(?:\.\d+)?)(ms|s|m|h|d|w)`)

// ParseDuration reads "90s", "1m", "14d", "2w" or sums such as "1h30m". A day
// is 24 h.
func ParseDuration(s string) (time.Duration, error) {
	d, m := parseDuration(s)
	if m != nil {
		return 0, Problems{{What: m.what, Hint: m.hint}}
	}
	return d, nil
}

func parseDuration(s string) (time.Duration, *mistake) {
	const hint = "write a number and a unit of ms, s, m, h, d, w, such as 90s, 10m or 14d"
	if s == "0" {
		return 0, nil
	}
	var sum float64
	rest := s
	for rest != "" {
		p := durationPart.FindStringSubmatch(rest)
		if p == nil {
			return 0, wrong(hint, "%q is no duration", s)
		}
		if m := leadingZero(p[1]); m != nil {
			return 0, m
		}
		x, err := strconv.ParseFloat(p[1], 64)
		if err != nil {
			return 0, wrong(hint, "%q is no duration", s)
		}
		sum += x * float64(units[p[2]])
		rest = rest[len(p[0]):]
	}
	if s == "" {
		return 0, wrong(hint, "no duration")
	}
	if sum > float64(maxDuration) {
		return 0, wrong("at most 36500d", "%s is too long", s)
	}
	return time.Duration(math.Round(sum)), nil
}

// FormatDuration writes a duration in the largest units that divide it, so that
// ParseDuration reads it back.
func FormatDuration(d time.Duration) string {
	for _, u := range []string{"w", "d", "h", "m", "s"} {
		// Two weeks read better as 14d.
		if n := units[u]; u != "w" && d >= n && d%n == 0 {
			return strconv.FormatInt(int64(d/n), 10) + u
		}
	}
	if d == 0 {
		return "0"
	}
	if d%time.Millisecond == 0 && d < time.Second {
		return strconv.FormatInt(int64(d/time.Millisecond), 10) + "ms"
	}
	return strconv.FormatFloat(d.Seconds(), 'f', -1, 64) + "s"
}

var sizeForm = regexp.MustCompile(`^(\d+(?:\.\d+)?) ?([kMGT]?B)$`)

var sizeUnits = map[string]float64{"B": 1, "kB": 1e3, "MB": 1e6, "GB": 1e9, "TB": 1e12}

// parseSize reads a number of bytes: 500MB, 20GB, decimal units.
func parseSize(s string) (int64, *mistake) {
	p := sizeForm.FindStringSubmatch(s)
	if p == nil {
		return 0, wrong("write a number and a unit of B, kB, MB, GB, TB, such as 20GB", "%q is no size", s)
	}
	if m := leadingZero(p[1]); m != nil {
		return 0, m
	}
	x, err := strconv.ParseFloat(p[1], 64)
	if err != nil || x*sizeUnits[p[2]] > 1e18 {
		return 0, wrong("at most 1000000TB", "%s is too large", s)
	}
	return int64(math.Round(x * sizeUnits[p[2]])), nil
}

func formatSize(n int64) string {
	for _, u := range []string{"TB", "GB", "MB", "kB"} {
		if f := int64(sizeUnits[u]); n >= f && n%f == 0 {
			return strconv.FormatInt(n/f, 10) + u
		}
	}
	return strconv.FormatInt(n, 10) + "B"
}

// leadingZero refuses 010, which some programs read as 8 and others as 10.
func leadingZero(s string) *mistake {
	t := strings.TrimLeft(s, "+-")
	if len(t) > 1 && t[0] == '0' && t[1] >= '0' && t[1] <= '9' {
		return wrong("write "+cutZeros(s), "%s has a leading zero", s)
	}
	return nil
}

func cutZeros(s string) string {
	sign := ""
	if s != "" && (s[0] == '-' || s[0] == '+') {
		sign, s = strings.TrimPrefix(s[:1], "+"), s[1:]
	}
	s = strings.TrimLeft(s, "0")
	if s == "" || s[0] == '.' {
		s = "0" + s
	}
	return sign + s
}

var plainNumber = regexp.MustCompile(`^[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?$`)
var decimalComma = regexp.MustCompile(`^[+-]?\d+,\d+$`)
var numberAndUnit = regexp.MustCompile(`^([+-]?\d+(?:\.\d+)?) *([^\d\s.,][^\s]*.*)$`)

// parseNumber reads a finite number with a decimal point.
func parseNumber(s string) (float64, *mistake) {
	if decimalComma.MatchString(s) {
		return 0, wrong("write a decimal point: "+strings.Replace(s, ",", ".", 1), "%q has a decimal comma", s)
	}
	if !plainNumber.MatchString(s) {
		if p := numberAndUnit.FindStringSubmatch(s); p != nil {
			return 0, wrong("write the number alone: "+p[1], "%q is a number with %q behind it", s, p[2])
		}
		return 0, wrong("write a number such as 12.5", "%q is no number", s)
	}
	if m := leadingZero(s); m != nil {
		return 0, m
	}
	x, err := strconv.ParseFloat(s, 64)
	if err != nil || math.IsInf(x, 0) || math.Abs(x) > math.MaxFloat32 {
		return 0, wrong("write a number below 1e38", "%s is too large", s)
	}
	if x == 0 {
		x = 0 // never -0, which would read as a change
	}
	return x, nil
}

func formatNumber(x float64) string {
	if math.IsNaN(x) {
		return ""
	}
	return strconv.FormatFloat(x, 'g', -1, 64)
}

// printable refuses control characters, invisible marks and broken UTF-8, which
// would make two names look alike.
func printable(s string) *mistake {
	for _, r := range s {
		if r == unicode.ReplacementChar || !(unicode.IsPrint(r)) {
			return wrong("use printable characters only", "%q holds the character %U, which cannot be printed", s, r)
		}
	}
	return nil
}

// word reads one of the known words; the position in known is its value.
func word(s string, known []string) (int, *mistake) {
	for i, k := range known {
		if s == k {
			return i, nil
		}
	}
	if n, meant := nearest(s, known); meant && len(known) > 4 {
		return 0, wrong("did you mean "+n+"?", "%q is unknown", s)
	}
	return 0, wrong("write one of "+strings.Join(known, ", "), "%q is unknown", s)
}

var dayNames = []string{"sun", "mon", "tue", "wed", "thu", "fri", "sat"}

// ParseHours reads a span of the week: "mon-fri 07:00-16:00", "sat,sun
// 00:00-24:00". A span that ends before it begins goes over midnight and
// belongs to the day on which it begins.
func ParseHours(s string) (Hours, error) {
	h, m := parseHours(s)
	if m != nil {
		return Hours{}, Problems{{What: m.what, Hint: m.hint}}
	}
	return h, nil
}

func parseHours(s string) (Hours, *mistake) {
	const hint = `write days and times such as "mon-fri 07:00-16:00" or "sat,sun 00:00-24:00"`
	h := Hours{Text: s}
	days, span, ok := strings.Cut(s, " ")
	from, to, ok2 := strings.Cut(span, "-")
	if !ok || !ok2 {
		return h, wrong(hint, "%q is no span of hours", s)
	}
	for part := range strings.SplitSeq(days, ",") {
		a, b, isSpan := strings.Cut(part, "-")
		if !isSpan {
			b = a
		}
		i, m1 := word(a, dayNames)
		j, m2 := word(b, dayNames)
		if m1 != nil || m2 != nil {
			return h, wrong("days are mon, tue, wed, thu, fri, sat, sun; "+hint, "%q is no day or span of days", part)
		}
		for {
			h.Days[i] = true
			if i == j {
				break
			}
			i = (i + 1) % 7
		}
	}
	var m *mistake
	if h.From, m = parseClock(from); m != nil {
		return h, m
	}
	if h.To, m = parseClock(to); m != nil {
		return h, m
	}
	if h.From == h.To || h.From == 24*60 {
		return h, wrong("for the whole day write 00:00-24:00", "the span %s is empty", span)
	}
	return h, nil
}

// parseClock reads "07:00" into minutes of the day; 24:00 is the day's end.
func parseClock(s string) (int, *mistake) {
	if len(s) == 5 && s[2] == ':' {
		hh, err1 := strconv.ParseUint(s[:2], 10, 8)
		mm, err2 := strconv.ParseUint(s[3:], 10, 8)
		if t := int(hh*60 + mm); err1 == nil && err2 == nil && mm < 60 && t <= 24*60 {
			return t, nil
		}
	}
	return 0, wrong("write hours and minutes with two digits each, such as 07:00", "%q is no time of day", s)
}
