package send

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"image/color"
	"math"
	"time"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"

	"midwatch/alert"
	"midwatch/collector"
)

// Colours of the traces: the palette of Okabe and Ito (2008), told apart by
// weight and dash too.
var (
	colourPV    = color.RGBA{0x1c, 0x20, 0x24, 0xff}
	colourSP    = color.RGBA{0x00, 0x72, 0xb2, 0xff}
	colourOP    = color.RGBA{0x5c, 0x64, 0x6b, 0xff}
	colourOnset = color.RGBA{0xd5, 0x5e, 0x00, 0xff}
)

// columns of the picture: more points than this per trace cannot be seen.
const columns = 680

// drawTrend gives a PNG of the loop's last hours, PV and SP above, OP below, with
// the onset marked; nil without an error when there is nothing to draw.
func drawTrend(ctx context.Context, frames collector.FrameReader, p alert.Picture, zone *time.Location) (png []byte, err error) {
	defer func() {
		if r := recover(); r != nil {
			png, err = nil, fmt.Errorf("drawing the trend failed: %v", r)
		}
	}()
	if p.To <= p.From {
		return nil, nil
	}
	var pv, sp, op trace
	for f, err := range frames.Frames(ctx, p.Loop, p.From, p.To) {
		if err != nil {
			return nil, err
		}
		x := float64(f.Time) / 1000
		col := int((f.Time - p.From) * columns / (p.To - p.From))
		pv.add(x, f.PV, col)
		sp.add(x, f.SP, col)
		op.add(x, f.OP, col)
	}
	if pv.points < 2 {
		return nil, nil
	}
	top, bottom := plot.New(), plot.New()
	top.Title.Text = fmt.Sprintf("%s, %s to %s", p.Loop, at(p.From, zone, "Mon 2 Jan 15:04"), at(p.To, zone, "Mon 2 Jan 15:04 -07:00"))
	top.Title.TextStyle.Font.Size = 9
	top.Y.Label.Text, bottom.Y.Label.Text = "PV, SP", "OP"
	if p.Unit != "" {
		top.Y.Label.Text += " [" + p.Unit + "]"
	}
	if err := errors.Join(
		pv.draw(top, "PV", draw.LineStyle{Color: colourPV, Width: 1.2}),
		sp.draw(top, "SP", draw.LineStyle{Color: colourSP, Width: 1, Dashes: []vg.Length{4, 3}}),
		op.draw(bottom, "", draw.LineStyle{Color: colourOP, Width: 1.2})); err != nil {
		return nil, err
	}
	top.Legend.Top, top.Legend.Left, top.Legend.TextStyle.Font.Size = true, true, 8
	for _, q := range []*plot.Plot{top, bottom} {
		q.X.Min, q.X.Max = float64(p.From)/1000, float64(p.To)/1000
		q.X.Tick.Marker = plot.TickerFunc(func(min, max float64) []plot.Tick { return timeTicks(min, max, zone) })
		q.X.Tick.Label.Font.Size, q.Y.Tick.Label.Font.Size, q.Y.Label.TextStyle.Font.Size = 8, 8, 8
		q.BackgroundColor = color.White
		if p.Onset >= p.From && p.Onset < p.To {
			if err := markOnset(q, float64(p.Onset)/1000, q == top); err != nil {
				return nil, err
			}
		}
	}
	img := vgimg.NewWith(vgimg.UseWH(510, 255), vgimg.UseDPI(96))
	dc := draw.New(img)
	plots := [][]*plot.Plot{{top}, {bottom}}
	canvases := plot.Align(plots, draw.Tiles{Rows: 2, Cols: 1, PadY: 4, PadTop: 2, PadBottom: 2, PadRight: 6}, dc)
	top.Draw(canvases[0][0])
	bottom.Draw(canvases[1][0])
	var b bytes.Buffer
	_, err = vgimg.PngCanvas{Canvas: img}.WriteTo(&b)
	return b.Bytes(), err
}

func at(ms int64, zone *time.Location, form string) string {
	return time.UnixMilli(ms).In(zone).Format(form)
}

// trace is one line with gaps; of the points of one column only the first, the
// least, the greatest and the last are kept, so that no swing is lost.
type trace struct {
	runs     []plotter.XYs
	points   int
	open     bool
	col      int
	low, top float64
}

func (t *trace) add(x float64, v float32, col int) {
	y := float64(v)
	if math.IsNaN(y) || math.IsInf(y, 0) {
		t.open = false
		return
	}
	t.points++
	if !t.open {
		t.runs, t.open, t.col = append(t.runs, plotter.XYs{{X: x, Y: y}}), true, col
		t.low, t.top = y, y
		return
	}
	run := &t.runs[len(t.runs)-1]
	if col == t.col && y >= t.low && y <= t.top {
		(*run)[len(*run)-1] = plotter.XY{X: x, Y: y}
		if n := len(*run); n > 3 {
			return
		}
	}
	if col != t.col {
		t.col, t.low, t.top = col, y, y
	}
	t.low, t.top = math.Min(t.low, y), math.Max(t.top, y)
	*run = append(*run, plotter.XY{X: x, Y: y})
}

func (t *trace) draw(p *plot.Plot, name string, style draw.LineStyle) error {
	for i, run := range t.runs {
		l, err := plotter.NewLine(run)
		if err != nil {
			return err
		}
		l.LineStyle = style
		p.Add(l)
		if i == 0 && name != "" {
			p.Legend.Add(name, l)
		}
	}
	return nil
}

// markOnset draws a line from bottom to top where it began.
func markOnset(p *plot.Plot, x float64, label bool) error {
	if p.Y.Min >= p.Y.Max || math.IsInf(p.Y.Min, 0) {
		p.Y.Min, p.Y.Max = p.Y.Min-1, p.Y.Min+1
	}
	l, err := plotter.NewLine(plotter.XYs{{X: x, Y: p.Y.Min}, {X: x, Y: p.Y.Max}})
	if err != nil {
		return err
	}
	l.LineStyle = draw.LineStyle{Color: colourOnset, Width: 1.4, Dashes: []vg.Length{6, 2}}
	p.Add(l)
	if label {
		p.Legend.Add("onset (estimated)", l)
	}
	return nil
}

// timeTicks are whole steps of the site's clock.
func timeTicks(min, max float64, zone *time.Location) []plot.Tick {
	span := time.Duration((max - min) * float64(time.Second))
	step := 24 * time.Hour
	for _, s := range []time.Duration{time.Minute, 5 * time.Minute, 10 * time.Minute, 30 * time.Minute, time.Hour, 2 * time.Hour, 3 * time.Hour, 6 * time.Hour, 12 * time.Hour} {
		if span/s <= 8 {
			step = s
			break
		}
	}
	var out []plot.Tick
	first := time.Unix(int64(min), 0).In(zone)
	y, m, d := first.Date()
	for t := time.Date(y, m, d, 0, 0, 0, 0, zone); float64(t.Unix()) <= max && len(out) < 40; t = t.Add(step) {
		if float64(t.Unix()) >= min {
			out = append(out, plot.Tick{Value: float64(t.Unix()), Label: t.Format("15:04")})
		}
	}
	return out
}
