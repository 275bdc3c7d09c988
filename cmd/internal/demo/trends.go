package demo

import (
	"context"
	"math"

	"midwatch/cmd/internal/daemon"
	"midwatch/collector"
	"midwatch/configs"
)

// A small trend shows e = PV - SP over the last two hours or so: two columns of
// dots a character, each from the least to the greatest of its span.
const (
	trendCells   = 16
	trendColumns = 2 * trendCells
	columnMs     = 225_000 // ms of plant time
	trendRows    = 4
	trendLeast   = 1.5 // % of range; less than that fills no more than the middle
)

// trends keeps the small trends of all loops.
type trends struct {
	watch *daemon.Daemon
	loops []*trend
}

type trend struct {
	loop   *configs.Loop
	next   int64 // ms UTC, of the first frame not read
	column int64 // number of the newest column
	low    [trendColumns]float64
	high   [trendColumns]float64
}

func newTrends(loops []*configs.Loop, d *daemon.Daemon, now int64) *trends {
	t := &trends{watch: d}
	for _, l := range loops {
		x := &trend{loop: l, next: now - trendColumns*columnMs}
		for i := range x.low {
			x.low[i], x.high[i] = math.NaN(), math.NaN()
		}
		t.loops = append(t.loops, x)
	}
	return t
}

// read takes in the frames kept since the last call.
func (t *trends) read(ctx context.Context) error {
	for _, x := range t.loops {
		for f, err := range t.watch.Frames(ctx, x.loop.Name, x.next, math.MaxInt64) {
			if err != nil {
				return err
			}
			x.add(&f)
		}
	}
	return nil
}

func (x *trend) add(f *collector.Frame) {
	x.next = f.Time + 1
	column := f.Time / columnMs
	for n := 0; x.column < column && n < trendColumns; n++ {
		x.column = max(x.column+1, column-trendColumns+1)
		i := x.column % trendColumns
		x.low[i], x.high[i] = math.NaN(), math.NaN()
	}
	e := 100 * float64(f.PV-f.SP) / (x.loop.PVHigh - x.loop.PVLow)
	i := column % trendColumns
	if math.IsNaN(e) || column <= x.column-trendColumns {
		return
	}
	x.low[i], x.high[i] = fmin(x.low[i], e), fmax(x.high[i], e)
}

// fmin and fmax take the other value for one that is missing.
func fmin(a, b float64) float64 {
	if math.IsNaN(a) || b < a {
		return b
	}
	return a
}

func fmax(a, b float64) float64 {
	if math.IsNaN(a) || b > a {
		return b
	}
	return a
}

// dots are the bits of a braille character by column and row from the top.
var dots = [2][trendRows]rune{{0x01, 0x02, 0x04, 0x40}, {0x08, 0x10, 0x20, 0x80}}

// String draws the trend; the set point lies between the middle rows.
func (x *trend) String() string {
	scale := trendLeast
	for i := range x.low {
		for _, v := range []float64{x.low[i], x.high[i]} {
			if !math.IsNaN(v) {
				scale = max(scale, math.Abs(v))
			}
		}
	}
	row := func(v float64) int {
		return min(trendRows-1, max(0, int(math.Floor((scale-v)/(2*scale)*trendRows))))
	}
	out := make([]rune, trendCells)
	for k := range trendColumns {
		i := (x.column + 1 + int64(k)) % trendColumns
		cell := &out[k/2]
		if *cell == 0 {
			*cell = 0x2800
		}
		if math.IsNaN(x.low[i]) {
			continue
		}
		for r := row(x.high[i]); r <= row(x.low[i]); r++ {
			*cell |= dots[k%2][r]
		}
	}
	return string(out)
}
