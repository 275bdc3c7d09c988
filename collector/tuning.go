package collector

import (
	"math"

	"midwatch/configs"
)

// integralOff is the reset time, s, that stands for "no integral action" read
// as 0 repeats: an infinite reset time is no number a frame could hold.
const integralOff = 1e9

// readTuning turns the values of gain and reset tags, as the faceplate shows
// them (NaN: not read), into what a frame holds; 0 is not read. A reset time of
// 0 is not read: it means "off" in some makes and "not set" in others.
func readTuning(l *configs.Loop, gain, reset float64) (gainPct, resetS float32) {
	g, r := l.IdealTuning(math.Abs(gain), reset) // some makes show the action as the sign of the gain
	if g = math.Abs(g); gain == gain && g > 0 && g <= math.MaxFloat32 {
		gainPct = float32(g)
	}
	if reset == reset && r > 0 {
		resetS = float32(min(r, integralOff))
	}
	return gainPct, resetS
}
