package mqtt

import (
	"math"
	"strconv"
	"time"
)

const (
	futureLimitMs = 5 * 60 * 1000   // a source clock may run ahead this much, ms
	firstTimeMs   = 946_684_800_000 // 2000-01-01: older times are a clock that was never set
	minuteMs      = int64(time.Minute / time.Millisecond)
)

// readTime reads a time as payloads carry it: RFC 3339, local time without an
// offset (zone must then be named), or a number since 1970, whose size tells
// its unit: above 1e17 nanoseconds, above 1e14 microseconds, above 1e11
// milliseconds, else seconds with a fraction.
//
// In the hour that summer time gives twice, the reading nearest to arrival is
// taken and doubled is set.
func readTime(text []byte, zone *time.Location, arrivedMs int64) (ms int64, doubled, ok bool) {
	text = trim(text)
	if len(text) >= 16 && text[4] == '-' {
		return readCalendar(text, zone, arrivedMs)
	}
	if !numeric(text) {
		return 0, false, false
	}
	x, err := strconv.ParseFloat(string(text), 64)
	if err != nil {
		return 0, false, false
	}
	switch {
	case x > 1e17:
		x /= 1e6
	case x > 1e14:
		x /= 1e3
	case x > 1e11:
	default:
		x *= 1e3
	}
	if math.Abs(x) > 1e15 {
		return 0, false, false
	}
	return int64(math.Round(x)), false, true
}

// readCalendar reads YYYY-MM-DDTHH:MM[:SS[.fraction]] with Z, an offset or
// neither. A space may stand for T, and a comma for the decimal point.
func readCalendar(b []byte, zone *time.Location, arrivedMs int64) (ms int64, doubled, ok bool) {
	year, ok1 := digits(b[0:4])
	month, ok2 := digits(b[5:7])
	day, ok3 := digits(b[8:10])
	hour, ok4 := digits(b[11:13])
	minute, ok5 := digits(b[14:16])
	if !(ok1 && ok2 && ok3 && ok4 && ok5) || b[7] != '-' || b[13] != ':' || (b[10] != 'T' && b[10] != 't' && b[10] != ' ') {
		return 0, false, false
	}
	b = b[16:]
	second, nanos := 0, 0
	if len(b) >= 3 && b[0] == ':' {
		var ok bool
		if second, ok = digits(b[1:3]); !ok {
			return 0, false, false
		}
		b = b[3:]
		if len(b) > 0 && (b[0] == '.' || b[0] == ',') {
			i, unit := 1, 100_000_000
			for ; i < len(b) && b[i] >= '0' && b[i] <= '9'; i++ {
				nanos += int(b[i]-'0') * unit
				unit /= 10
			}
			if i == 1 {
				return 0, false, false
			}
			b = b[i:]
		}
	}
	wall := time.Date(year, time.Month(month), day, hour, minute, second, nanos, time.UTC)
	if month < 1 || month > 12 || wall.Day() != day || day < 1 || hour > 23 || minute > 59 || second > 59 {
		return 0, false, false
	}
	ms = wall.UnixMilli()
	if len(b) == 0 {
		if zone == nil {
			return 0, false, false
		}
		ms, doubled = fromLocal(ms, zone, arrivedMs)
		return ms, doubled, true
	}
	offset, ok := readOffset(b)
	return ms - offset, false, ok
}

// readOffset reads Z, +HH:MM, +HHMM or +HH as milliseconds east of Greenwich.
func readOffset(b []byte) (int64, bool) {
	if len(b) == 1 && (b[0] == 'Z' || b[0] == 'z') {
		return 0, true
	}
	sign := int64(1)
	switch {
	case len(b) < 3:
		return 0, false
	case b[0] == '-':
		sign = -1
	case b[0] != '+':
		return 0, false
	}
	h, ok := digits(b[1:3])
	m := 0
	rest := b[3:]
	if len(rest) > 0 && rest[0] == ':' {
		rest = rest[1:]
		ok = ok && len(rest) == 2
	}
	if len(rest) > 0 {
		var okm bool
		m, okm = digits(rest)
		ok = ok && okm && len(rest) == 2
	}
	return sign * (int64(h)*60 + int64(m)) * minuteMs, ok && h < 24 && m < 60
}

// fromLocal turns wall clock milliseconds of a zone into UTC. A wall clock time
// that never was (spring) is read with the offset from before the change.
func fromLocal(wallMs int64, zone *time.Location, nearMs int64) (ms int64, doubled bool) {
	const day = 24 * 60 * minuteMs
	before := wallMs - zoneOffset(wallMs-day, zone)
	after := wallMs - zoneOffset(wallMs+day, zone)
	if before == after {
		return before, false
	}
	fits := func(ms int64) bool { return ms+zoneOffset(ms, zone) == wallMs }
	switch okBefore, okAfter := fits(before), fits(after); {
	case okBefore && okAfter:
		if absMs(before-nearMs) <= absMs(after-nearMs) {
			return before, true
		}
		return after, true
	case okAfter:
		return after, false
	}
	return before, false
}

func zoneOffset(ms int64, zone *time.Location) int64 {
	_, s := time.UnixMilli(ms).In(zone).Zone()
	return int64(s) * 1000
}

func absMs(x int64) int64 {
	if x < 0 {
		return -x
	}
	return x
}

func digits(b []byte) (int, bool) {
	n := 0
	for _, c := range b {
		if c < '0' || c > '9' {
			return 0, false
		}
		n = n*10 + int(c-'0')
	}
	return n, len(b) > 0
}
