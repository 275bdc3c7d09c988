package daemon

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/store"
)

type storeStats = store.Stats

// writeExport writes what is asked for from a window, of all loops or those
// named.
func writeExport(ctx context.Context, w io.Writer, win *store.Window, loops []*configs.Loop, e api.Export) error {
	if len(e.Loops) > 0 {
		var some []*configs.Loop
		for _, name := range e.Loops {
			i := slices.IndexFunc(loops, func(l *configs.Loop) bool { return l.Name == name })
			if i < 0 {
				return fmt.Errorf("loop %q is not in the loop list; hint: `midwatch status` names the loops", name)
			}
			some = append(some, loops[i])
		}
		loops = some
	}
	switch e.What {
	case api.ExportLoops:
		return configs.WriteLoopList(w, loops)
	case api.ExportMemory:
		m, err := memoriesAt(win, loops, e.From)
		if err != nil {
			return err
		}
		var names []string
		for _, l := range loops {
			names = append(names, l.Name)
		}
		return m.Write(w, names)
	}
	starts := make([]int64, len(loops))
	for i, l := range loops {
		starts[i] = e.From
		if !e.AfterMemory {
			continue
		}
		_, through, err := win.MemoryAt(l.Name, e.From)
		if err == nil {
			starts[i] = through + 1
		} else if !errors.Is(err, store.ErrNoMemory) {
			return err
		}
	}
	return writeTrend(ctx, w, win, loops, starts, e.To)
}

// memoriesAt gathers the newest memories that are not younger than a time, ms
// UTC; a loop without one is left out.
func memoriesAt(w *store.Window, loops []*configs.Loop, t int64) (*Memories, error) {
	m := &Memories{Loops: map[string][]byte{}}
	for _, l := range loops {
		b, _, err := w.MemoryAt(l.Name, t)
		if err != nil && !errors.Is(err, store.ErrNoMemory) {
			return nil, err
		}
		if err == nil {
			m.Loops[l.Name] = b
		}
	}
	b, _, err := w.MemoryAt(sitesName, t)
	if err != nil && !errors.Is(err, store.ErrNoMemory) {
		return nil, err
	}
	if err == nil {
		m.Sites = b
	}
	return m, nil
}

// exportFrames is about how many frames an export holds in memory at once.
const exportFrames = 500_000

// writeTrend writes the frames of loops, each from its start, as trend CSV in
// order of time, then of the list. It goes by stretches of time, so that memory
// does not grow with the span.
func writeTrend(ctx context.Context, w io.Writer, win *store.Window, loops []*configs.Loop, starts []int64, to int64) error {
	out := trend.NewWriter(w, trend.AllColumns)
	step := int64(exportFrames) * 1000 / int64(max(1, len(loops)))
	step = min(max(step, 60_000), 24*3600_000)
	type row struct {
		loop int
		f    collector.Frame
	}
	var rows []row
	at := to
	for _, t := range starts {
		at = min(at, t)
	}
	if oldest := win.Stats().Oldest; oldest > at {
		at = oldest
	}
	for at < to {
		end := to
		if at < math.MaxInt64-step {
			end = min(to, at+step)
		}
		rows = rows[:0]
		next := int64(math.MaxInt64)
		for i, l := range loops {
			for f, err := range win.Frames(ctx, l.Name, max(at, starts[i]), end) {
				if err != nil {
					return err
				}
				rows = append(rows, row{i, f})
			}
		}
		if len(rows) == 0 {
			// Nothing here: go on where there is something.
			for i, l := range loops {
				for f, err := range win.Frames(ctx, l.Name, max(end, starts[i]), to) {
					if err != nil {
						return err
					}
					next = min(next, f.Time)
					break
				}
			}
			if next == math.MaxInt64 {
				break
			}
			at = next
			continue
		}
		slices.SortStableFunc(rows, func(a, b row) int { return cmp.Compare(a.f.Time, b.f.Time) })
		for i := range rows {
			if err := out.Write(loops[rows[i].loop].Name, &rows[i].f); err != nil {
				return err
			}
		}
		at = end
	}
	return out.Flush()
}
