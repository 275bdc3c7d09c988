package trend

import (
	"math"
	"strconv"

	"midwatch/collector"
)

// Powers of ten that are exact in float32 and in float64.
var (
	tens32 = [...]float32{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10}
	tens64 = [...]float64{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11,
		1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22}
)

// scanNumber reads the number at b[i:] up to a comma or the end: plain digits
// with a point, exactly as strconv.ParseFloat(s, 32) reads them. An empty field
// is NaN. ok is false for whatever needs the long way.
func scanNumber(b []byte, i int) (v float32, next int, ok bool) {
	if i == len(b) || b[i] == ',' {
		return collector.NaN32, i, true
	}
	neg := b[i] == '-'
	if neg {
		i++
	}
	var m uint64
	start := i
	for i < len(b) {
		c := b[i] - '0'
		if c > 9 {
			break
		}
		m = m*10 + uint64(c)
		i++
	}
	digits, frac := i-start, 0
	if i < len(b) && b[i] == '.' {
		i++
		start = i
		for i < len(b) {
			c := b[i] - '0'
			if c > 9 {
				break
			}
			m = m*10 + uint64(c)
			i++
		}
		frac = i - start
		digits += frac
	}
	if digits == 0 || digits > 19 || i < len(b) && b[i] != ',' {
		return 0, i, false
	}
	v, ok = decimal(m, frac)
	if neg {
		v = -v
	}
	return v, i, ok
}

// decimal gives m / 10^frac rounded once to float32, where one division does
// it; ok is false elsewhere.
func decimal(m uint64, frac int) (v float32, ok bool) {
	switch {
	case m == 0:
		return 0, true
	case m < 1<<24 && frac < len(tens32):
		return float32(m) / tens32[frac], true // both exact: rounded once
	case m < 1<<53 && frac < len(tens64):
		d := float64(m) / tens64[frac]
		// d is rounded once to float64. Rounding it again to float32 is right
		// unless it lies just between two float32.
		if d < 0x1p-126 || d > math.MaxFloat32 || math.Float64bits(d)&(1<<29-1) == 1<<28 {
			return 0, false
		}
		return float32(d), true
	}
	return 0, false
}

// parseNumber reads a whole field the long way. What does not fit a float32 is
// infinite.
func parseNumber(s string) (float32, bool) {
	if s == "" {
		return collector.NaN32, true
	}
	v, err := strconv.ParseFloat(s, 32)
	if err != nil && !math.IsInf(v, 0) {
		return 0, false
	}
	return float32(v), true
}

// clean is [collector.Clean32] for a float32.
func clean(v float32) float32 {
	if v == 0 {
		return 0
	}
	if v-v != 0 { // NaN or infinite
		return collector.NaN32
	}
	return v
}
