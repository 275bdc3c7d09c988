package trend

import "time"

const dayMs = 86_400_000

// clock reads RFC 3339 times. It remembers the last date, since rows of a
// recorded trend mostly share it.
type clock struct {
	date  [10]byte
	dayMs int64
}

// scan reads the time at b[i:] up to a comma or the end: ms UTC, digits beyond
// the third cut off. ok is false for whatever needs the long way.
func (c *clock) scan(b []byte, i int) (ms int64, next int, ok bool) {
	if len(b)-i < 20 {
		return 0, i, false
	}
	t := b[i : i+19]
	if t[10] != 'T' || t[13] != ':' || t[16] != ':' {
		return 0, i, false
	}
	if [10]byte(t[:10]) != c.date || t[0] == 0 {
		day, ok := daysOf(t[:10])
		if !ok {
			return 0, i, false
		}
		c.date, c.dayMs = [10]byte(t[:10]), day*dayMs
	}
	h, m, s := two(t[11:]), two(t[14:]), two(t[17:])
	if h > 23 || m > 59 || s > 59 {
		return 0, i, false
	}
	ms = c.dayMs + int64((h*60+m)*60+s)*1000
	i += 19
	if b[i] == '.' {
		i++
		start, scale := i, int64(100)
		for i < len(b) && b[i]-'0' <= 9 {
			ms += scale * int64(b[i]-'0')
			scale /= 10
			i++
		}
		if i == start || i-start > 9 || i == len(b) {
			return 0, i, false
		}
	}
	switch b[i] {
	case 'Z':
		i++
	case '+', '-':
		if len(b)-i < 6 || b[i+3] != ':' {
			return 0, i, false
		}
		oh, om := two(b[i+1:]), two(b[i+4:])
		if oh > 23 || om > 59 {
			return 0, i, false
		}
		off := int64(oh*60+om) * 60_000
		if b[i] == '+' {
			off = -off
		}
		ms += off
		i += 6
	default:
		return 0, i, false
	}
	return ms, i, i == len(b) || b[i] == ','
}

// two reads two digits; more than 99 when they are none.
func two(b []byte) uint {
	x, y := b[0]-'0', b[1]-'0'
	if x > 9 || y > 9 {
		return 255
	}
	return uint(x)*10 + uint(y)
}

// daysOf gives the days since 1970 of YYYY-MM-DD.
func daysOf(b []byte) (int64, bool) {
	hi, lo, m, d := two(b), two(b[2:]), two(b[5:]), two(b[8:])
	if hi > 99 || lo > 99 || b[4] != '-' || b[7] != '-' || m < 1 || m > 12 || d < 1 || d > 31 {
		return 0, false
	}
	t := time.Date(int(hi*100+lo), time.Month(m), int(d), 0, 0, 0, 0, time.UTC)
	if t.Day() != int(d) {
		return 0, false // such as 31 April
	}
	return t.Unix() / 86400, true // exact: midnight
}

// parseTime reads a whole field the long way.
func parseTime(s string) (ms int64, ok bool) {
	t, err := time.Parse(time.RFC3339Nano, s)
	if err != nil {
		return 0, false
	}
	return t.UnixMilli(), true
}

// append writes ms UTC as RFC 3339 with three digits.
func (c *clock) append(dst []byte, ms int64) ([]byte, bool) {
	in := ms % dayMs
	if in < 0 {
		in += dayMs
	}
	if day := ms - in; day != c.dayMs || c.date == [10]byte{} {
		t := time.UnixMilli(day).UTC()
		if y := t.Year(); y < 0 || y > 9999 {
			return dst, false
		}
		t.AppendFormat(c.date[:0], time.DateOnly)
		c.dayMs = day
	}
	dst = append(dst, c.date[:]...)
	dst = append(dst, 'T')
	dst = appendTwo(dst, in/3_600_000)
	dst = append(dst, ':')
	dst = appendTwo(dst, in/60_000%60)
	dst = append(dst, ':')
	dst = appendTwo(dst, in/1000%60)
	dst = append(dst, '.', byte('0'+in%1000/100))
	dst = appendTwo(dst, in%100)
	return append(dst, 'Z'), true
}

func appendTwo(dst []byte, v int64) []byte {
	return append(dst, byte('0'+v/10), byte('0'+v%10))
}
