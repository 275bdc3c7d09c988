package daemon

import (
	"context"
	"errors"
	"fmt"
	"iter"
	"os"
	"path/filepath"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/store"
)

// takeInFrames is how many frames of a loop wait in memory between flushes; few
// enough that nothing is given up, and that the usual chunk of flushes holds
// them.
const takeInFrames = 100

// TakeIn puts recorded frames into a data folder that no daemon uses yet, so
// that a daemon started on it begins with that history. Frames of a loop must
// come in order of time, loops at about the same pace; ids are the indexes of the
// loop list.
func TakeIn(ctx context.Context, data string, loops []*configs.Loop, frames iter.Seq2[collector.LoopID, collector.Frame]) (err error) {
	if err := os.MkdirAll(data, 0o750); err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	w, err := store.OpenWindow(filepath.Join(data, windowDir), store.Options{})
	if err != nil {
		return fmt.Errorf("trends in %s: %w", data, err)
	}
	defer func() { err = errors.Join(err, w.Close()) }()
	names := make([]store.Loop, len(loops))
	for i, l := range loops {
		names[i] = store.Loop{ID: collector.LoopID(i), Name: l.Name}
	}
	if err := w.Register(names); err != nil {
		return err
	}
	waiting := make([]int, len(loops))
	for id, f := range frames {
		w.Append(id, f)
		if waiting[id]++; waiting[id] < takeInFrames {
			continue
		}
		clear(waiting)
		if err := errors.Join(w.Flush(ctx), ctx.Err()); err != nil {
			return err
		}
	}
	if err := w.Flush(ctx); err != nil {
		return err
	}
	if n := w.Stats().Dropped; n > 0 {
		return fmt.Errorf("%d recorded frames were given up; hint: is there room in %s?", n, data)
	}
	return nil
}
