package detect

import "math"

// moment is a time since T0 in eighths of a second, for what a watch holds many of: half
// the size of a float64, and as fine after 17 years, where it ends, as on the first day.
// What lies before T0 counts as T0.
type moment uint32

const momentsInS = 8

// momentOf is the moment nearest to a time, s.
func momentOf(t float64) moment {
	return moment(min(max(math.Round(t*momentsInS), 0), math.MaxUint32))
}

// s is the time in s.
func (m moment) s() float64 { return float64(m) / momentsInS }
