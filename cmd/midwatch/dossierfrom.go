package main

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"iter"
	"math"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"time"

	"midwatch/alert"
	"midwatch/alert/dossier"
	"midwatch/alert/page/api"
	"midwatch/cmd/internal/daemon"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

// supply is where dossiers come from: recorded trends, or a watch.
type supply struct {
	list []*configs.Loop
	pass int // loops that may be open at once; 0: any number
	// open makes loops ready and gives what their dossiers are made from; what it
	// gives may be asked from several goroutines.
	open func([]*configs.Loop) (func(*configs.Loop) (dossier.Input, error), error)
	done func()
}

// mostFrames are held at once of recorded trends.
const mostFrames = 4_000_000

// fromTrend judges the recorded loops as replay does, then gathers the frames.
// names are those asked for: one that is not in the list is told before long work.
func (h *house) fromTrend(config, loops string, files, names []string, span [2]int64) (s supply, err error) {
	list, budget, err := loadLoops(config, loops)
	if err != nil {
		return s, err
	}
	for _, name := range names {
		if _, err := loopOf(list, name); err != nil {
			return s, err
		}
	}
	s.list, s.done = list, func() {}
	o := detect.Options{NuisancePerLoopYear: budget}
	base := dossier.Input{Detect: o, From: span[0], To: span[1], Others: len(list) > 1, Source: "recorded trend: " + baseNames(files), Findings: []detect.Finding{}}
	for _, f := range files {
		if f == "-" {
			return s, usagef("--trend -: standard input cannot be read twice; hint: write it to a file first")
		}
		sum, err := sumOf(f)
		if err != nil {
			return s, err
		}
		base.Sums = append(base.Sums, sum)
	}
	say := func(s string) { fmt.Fprintf(h.stderr, "midwatch: %s\n", s) }
	r, err := trend.Open(files, list, trend.Options{Say: say})
	if err != nil {
		return s, err
	}
	var told bytes.Buffer
	sum, err := daemon.Replay(h.ctx, r, daemon.ReplayOptions{Loops: list, Detect: o, Findings: &told, Say: say})
	if err = errors.Join(err, r.Close()); err != nil {
		return s, err
	}
	for d := json.NewDecoder(&told); ; {
		var f detect.Finding
		if err := d.Decode(&f); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			return s, fmt.Errorf("findings: %w", err)
		}
		base.Findings = append(base.Findings, f)
	}
	each := max(1, sum.Rows/int64(max(1, len(list))))
	s.pass = int(max(1, mostFrames/each))
	recovery := h.recoveries(list, o, func(l *configs.Loop) iter.Seq2[collector.Frame, error] { return framesOf(h.ctx, files, nil, l) })
	s.open = func(ls []*configs.Loop) (func(*configs.Loop) (dossier.Input, error), error) {
		frames, err := gather(h.ctx, files, ls)
		if err != nil {
			return nil, err
		}
		return func(l *configs.Loop) (in dossier.Input, err error) {
			in = base
			in.Loop, in.Frames = l, func(yield func(collector.Frame, error) bool) {
				for i := range frames[l.Name] {
					if !yield(frames[l.Name][i], nil) {
						return
					}
				}
			}
			in.Partners, err = partners(list, l, recovery)
			return in, err
		}, nil
	}
	return s, nil
}

// gather reads the frames of some loops in one pass over trend files.
func gather(ctx context.Context, files []string, ls []*configs.Loop) (map[string][]collector.Frame, error) {
	r, err := trend.Open(files, ls, trend.Options{})
	if err != nil {
		return nil, err
	}
	defer r.Close()
	out := map[string][]collector.Frame{}
	for ctx.Err() == nil {
		id, f, err := r.Next()
		if errors.Is(err, io.EOF) {
			return out, nil
		}
		if err != nil {
			return nil, err
		}
		name := ls[id].Name
		out[name] = append(out[name], *f)
	}
	return nil, fmt.Errorf("stopped by a signal: %w", ctx.Err())
}

// fromWatch reads loops from the running watch and the slices it has sealed, or
// from its data folder.
func (h *house) fromWatch(config string, span [2]int64) (s supply, err error) {
	c, err := loadPlain(config)
	if err != nil {
		return s, err
	}
	base := dossier.Input{From: span[0], To: span[1], Site: c.Site.Name, Zone: c.Site.Zone,
		Detect: detect.Options{NuisancePerLoopYear: c.Detect.NuisancePerLoopYear}}
	if base.From == 0 {
		end := time.Now().UnixMilli()
		if base.To != 0 {
			end = base.To
		}
		base.From = end - 14*24*time.Hour.Milliseconds()
	}
	to := base.To
	if to == 0 {
		to = noEnd
	}
	s.list = c.Loops
	cl := dial(c.Data)
	var st api.Status
	err = cl.get(h.ctx, "/api/status", &st)
	running := err == nil
	if err != nil && !errors.Is(err, errNotRunning) {
		return s, err
	}
	open := daemon.Look
	if running {
		open = daemon.Sealed
	}
	f, err := open(c)
	if err != nil {
		return s, err
	}
	s.done = func() { _ = f.Close() } // opened for reading only
	frames := func(l *configs.Loop) iter.Seq2[collector.Frame, error] { return f.Frames(h.ctx, l.Name, base.From, to) }
	past, kept := f.Past, f.Tuning
	base.Source = "data folder of the watch"
	view := func(name string) float64 {
		if v, ok := f.View(name); ok {
			return v.TimeScaleS
		}
		return math.NaN()
	}
	if running {
		base.Source = "running watch"
		frames = func(l *configs.Loop) iter.Seq2[collector.Frame, error] {
			return h.sealedThenLive(f, cl, l, base.From, to)
		}
		past = func(names []string, from int64) (p alert.Past, err error) {
			q := url.Values{"loop": names, "from": {time.UnixMilli(from).UTC().Format(time.RFC3339Nano)}}
			return p, cl.get(h.ctx, "/api/past?"+q.Encode(), &p)
		}
		kept = func(l *configs.Loop) (rs []api.TuningReading, err error) {
			return rs, cl.get(h.ctx, "/api/loops/"+url.PathEscape(l.Name)+"/tuning", &rs)
		}
		view = func(name string) float64 {
			var v api.LoopView
			if cl.get(h.ctx, "/api/loops/"+url.PathEscape(name), &v) != nil || v.TimeScaleS == nil {
				return math.NaN()
			}
			return *v.TimeScaleS
		}
	}
	s.open = func(ls []*configs.Loop) (func(*configs.Loop) (dossier.Input, error), error) {
		var names []string
		for _, l := range ls {
			names = append(names, l.Name)
		}
		p, err := past(names, base.From)
		if err != nil {
			return nil, err
		}
		return func(l *configs.Loop) (in dossier.Input, err error) {
			in = base
			in.Loop, in.Frames = l, frames(l)
			in.Told(p)
			rs, err := kept(l)
			if err != nil {
				return in, err
			}
			for _, r := range rs {
				in.Kept = append(in.Kept, dossier.Kept(r))
			}
			in.Partners, err = partners(s.list, l, func(name string) (float64, error) { return view(name), nil })
			return in, err
		}, nil
	}
	s.pass = 200 // names of one request
	return s, nil
}

// sealedThenLive reads what the watch has sealed, and asks it for the rest.
func (h *house) sealedThenLive(f *daemon.Folder, cl client, l *configs.Loop, from, to int64) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		for x, err := range f.Frames(h.ctx, l.Name, from, to) {
			if !yield(x, err) || err != nil {
				return
			}
			from = x.Time + 1
		}
		r, w := io.Pipe()
		go func() {
			w.CloseWithError(h.exportFrom(cl, api.Export{What: api.ExportTrend, Loops: []string{l.Name}, From: from, To: to}, w))
		}()
		defer r.Close() // ends the writer, too
		for x, err := range framesOf(h.ctx, []string{"-"}, r, l) {
			if !yield(x, err) {
				return
			}
		}
	}
}

// recoveries gives the usual recovery of loops (s) as a watch over their frames
// sees it; each is asked for once.
func (h *house) recoveries(list []*configs.Loop, o detect.Options, frames func(*configs.Loop) iter.Seq2[collector.Frame, error]) func(string) (float64, error) {
	var mu sync.Mutex
	known := map[string]float64{}
	return func(name string) (float64, error) {
		mu.Lock()
		defer mu.Unlock()
		if v, ok := known[name]; ok {
			return v, nil
		}
		l, err := loopOf(list, name)
		if err != nil {
			return 0, err
		}
		w := detect.New(l, 0, o)
		for f, err := range frames(l) {
			if err != nil {
				return 0, fmt.Errorf("frames of loop %s: %w", name, err)
			}
			w.Step(&f, func(*detect.Finding) {})
		}
		known[name] = w.View().TimeScaleS
		return known[name], nil
	}
}

func loopOf(list []*configs.Loop, name string) (*configs.Loop, error) {
	for _, l := range list {
		if l.Name == name {
			return l, nil
		}
	}
	return nil, usagef("loop %q is not in the loop list; hint: its names are in the column loop", name)
}

// framesOf reads the frames of one loop from trend files; "-" is stdin.
func framesOf(ctx context.Context, files []string, stdin io.Reader, l *configs.Loop) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		r, err := trend.Open(files, []*configs.Loop{l}, trend.Options{Stdin: stdin})
		if err != nil {
			yield(collector.Frame{}, err)
			return
		}
		defer r.Close()
		for ctx.Err() == nil {
			_, f, err := r.Next()
			if errors.Is(err, io.EOF) {
				return
			}
			if err != nil {
				yield(collector.Frame{}, err)
				return
			}
			if !yield(*f, nil) {
				return
			}
		}
		yield(collector.Frame{}, fmt.Errorf("stopped by a signal: %w", ctx.Err()))
	}
}

// partners are the loops that hang together with one, with their usual recovery
// (s) where they are the other half of a cascade.
func partners(list []*configs.Loop, of *configs.Loop, recovery func(string) (float64, error)) ([]dossier.Partner, error) {
	var out []dossier.Partner
	for _, k := range configs.Structure(list) {
		if !slices.Contains(k.Loops, of.Name) {
			continue
		}
		for i, name := range k.Loops {
			if name == of.Name {
				continue
			}
			p := dossier.Partner{Loop: name, Relation: string(k.Relation)}
			if k.Relation == configs.CascadePair {
				p.Relation = []string{"outer", "inner"}[i]
				var err error
				if p.RecoveryS, err = recovery(name); err != nil {
					return out, err
				}
			}
			out = append(out, p)
		}
	}
	return out, nil
}

func baseNames(files []string) string {
	var out []string
	for _, f := range files {
		out = append(out, filepath.Base(f))
	}
	return strings.Join(out, ", ")
}

func sumOf(path string) (dossier.Sum, error) {
	f, err := os.Open(path)
	if err != nil {
		return dossier.Sum{}, fmt.Errorf("trend: %w", err)
	}
	defer f.Close()
	s := sha256.New()
	if _, err := io.Copy(s, f); err != nil {
		return dossier.Sum{}, fmt.Errorf("trend: %s: %w", path, err)
	}
	return dossier.Sum{Name: filepath.Base(path), SHA256: hex.EncodeToString(s.Sum(nil))}, nil
}
