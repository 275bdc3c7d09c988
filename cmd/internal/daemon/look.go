package daemon

import (
	"context"
	"errors"
	"fmt"
	"io"
	"iter"
	"log/slog"
	"os"
	"path/filepath"
	"time"

	"midwatch/alert"
	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/store"
)

// Folder is a data folder opened for looking only, while no daemon runs on it.
type Folder struct {
	c      *configs.Config
	state  *store.State
	window *store.Window
	desk   *alert.Desk
}

// Look opens the data folder of a configuration for reading. It is refused while
// a daemon has it.
func Look(c *configs.Config) (_ *Folder, err error) {
	f := &Folder{c: c}
	defer func() {
		if err != nil {
			err = errors.Join(err, f.Close())
		}
	}()
	path := filepath.Join(c.Data, stateFile)
	f.state, err = store.OpenStateReadOnly(path)
	switch {
	case errors.Is(err, os.ErrNotExist):
		return f, fmt.Errorf("data folder %s holds no watch; hint: midwatch run makes one", c.Data)
	case errors.Is(err, store.ErrInUse):
		return f, fmt.Errorf("data folder %s is in use, but its watch does not answer; hint: it may be starting or stopping, try again", c.Data)
	case err != nil:
		return f, fmt.Errorf("data folder %s: %w", c.Data, err)
	}
	if f.window, err = store.OpenWindow(filepath.Join(c.Data, windowDir), store.Options{ReadOnly: true}); err != nil {
		return f, fmt.Errorf("trends in %s: %w", c.Data, err)
	}
	advise := configs.Advise{}
	f.desk, err = alert.New(alert.Options{Store: alert.On(f.state), Clock: time.Now, Log: slog.New(slog.DiscardHandler),
		Settings: alert.Settings{Site: c.Site.Name, Zone: c.Site.Zone, Loops: c.Loops, Advise: advise}})
	return f, err
}

// Sealed opens the trends of a data folder that no running watch writes any more,
// beside one that may run. The newest hours are not among them.
func Sealed(c *configs.Config) (*Folder, error) {
	w, err := store.OpenWindow(filepath.Join(c.Data, windowDir), store.Options{ReadOnly: true, Beside: true})
	if err != nil {
		return nil, fmt.Errorf("trends in %s: %w", c.Data, err)
	}
	return &Folder{c: c, window: w}, nil
}

// Frames reads kept frames of a loop, oldest first, from <= Time < to.
func (f *Folder) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	return f.window.Frames(ctx, loop, from, to)
}

// Tuning gives the kept readings of the tuning in service of a loop, oldest first.
func (f *Folder) Tuning(l *configs.Loop) ([]api.TuningReading, error) {
	return keptTuning(f.state, l.Name, l.Was, 0)
}

// Past is what the desk knew of loops since a data time, ms UTC.
func (f *Folder) Past(loops []string, from int64) (alert.Past, error) {
	return f.desk.Past(loops, from)
}

// Close lets go of the folder.
func (f *Folder) Close() error {
	var errs []error
	if f.desk != nil {
		f.desk.Stop()
	}
	if f.window != nil {
		errs = append(errs, f.window.Close())
	}
	if f.state != nil {
		errs = append(errs, f.state.Close())
	}
	return errors.Join(errs...)
}

// Export writes trends, the loop list or memories.
func (f *Folder) Export(ctx context.Context, w io.Writer, e api.Export) error {
	return writeExport(ctx, w, f.window, f.c.Loops, e)
}

// Status is what the folder says: what was open, and how each loop was when its
// memory was made.
func (f *Folder) Status() api.Status {
	s := api.Status{Site: f.c.Site.Name, Shelves: f.desk.Shelves(), Episodes: openOnly(api.Episodes(f.desk))}
	st := f.window.Stats()
	s.Trends = trends(st.Bytes, f.c.Keep.Size, st.Frames, st.Dropped, st.Oldest)
	for _, l := range f.Loops() {
		s.Loops.Add(l.State)
	}
	return s
}

// Loops gives the state of each loop when its newest memory was made.
func (f *Folder) Loops() []api.LoopState {
	out := make([]api.LoopState, 0, len(f.c.Loops))
	for i, l := range f.c.Loops {
		s := api.LoopState{Loop: l, State: detect.NoData, Why: "no memory is kept"}
		if b, _, err := f.window.Memory(l.Name); err == nil {
			w := detect.New(l, collector.LoopID(i), detect.Options{})
			if err := w.Load(b); err == nil {
				v := w.View()
				s.State, s.Why, s.Blind = v.State, v.Why, v.BlindSpots
			} else {
				s.Why = err.Error()
			}
		}
		out = append(out, s)
	}
	return out
}

// View is what the newest memory of a loop knows; false where there is none.
func (f *Folder) View(loop string) (detect.View, bool) {
	for i, l := range f.c.Loops {
		if l.Name != loop {
			continue
		}
		b, _, err := f.window.Memory(loop)
		if err != nil {
			return detect.View{}, false
		}
		w := detect.New(l, collector.LoopID(i), detect.Options{})
		if w.Load(b) != nil {
			return detect.View{}, false
		}
		return w.View(), true
	}
	return detect.View{}, false
}
