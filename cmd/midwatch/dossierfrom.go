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
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strings"
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

// fromTrend judges the recorded loops as replay does, then gathers the frames of
// one.
func (h *house) fromTrend(config, loops, name string, files []string, span [2]int64) (dossier.Input, error) {
	list, budget, err := loadLoops(config, loops)
	if err != nil {
		return dossier.Input{}, err
	}
	o := detect.Options{NuisancePerLoopYear: budget}
	in := dossier.Input{Detect: o, From: span[0], To: span[1], Others: len(list) > 1, Source: "recorded trend: " + baseNames(files)}
	if in.Loop, err = loopOf(list, name); err != nil {
		return in, err
	}
	for _, f := range files {
		if f == "-" {
			return in, usagef("--trend -: standard input cannot be read twice; hint: write it to a file first")
		}
		sum, err := sumOf(f)
		if err != nil {
			return in, err
		}
		in.Sums = append(in.Sums, sum)
	}
	say := func(s string) { fmt.Fprintf(h.stderr, "midwatch: %s\n", s) }
	r, err := trend.Open(files, list, trend.Options{Say: say})
	if err != nil {
		return in, err
	}
	var told bytes.Buffer
	_, err = daemon.Replay(h.ctx, r, daemon.ReplayOptions{Loops: list, Detect: o, Findings: &told, Say: say})
	if err = errors.Join(err, r.Close()); err != nil {
		return in, err
	}
	in.Findings = []detect.Finding{}
	for d := json.NewDecoder(&told); ; {
		var f detect.Finding
		if err := d.Decode(&f); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			return in, fmt.Errorf("findings: %w", err)
		}
		in.Findings = append(in.Findings, f)
	}
	frames := func(l *configs.Loop) iter.Seq2[collector.Frame, error] {
		return framesOf(h.ctx, files, nil, l)
	}
	in.Frames = frames(in.Loop)
	in.Partners, err = partners(list, in.Loop, o, frames)
	return in, err
}

// fromWatch reads the loop from the running watch, or from its data folder; done
// lets go of it.
func (h *house) fromWatch(config, name string, span [2]int64) (in dossier.Input, done func(), err error) {
	c, err := loadPlain(config)
	if err != nil {
		return in, nil, err
	}
	in = dossier.Input{From: span[0], To: span[1], Site: c.Site.Name, Zone: c.Site.Zone, Source: "data folder of the watch",
		Detect: detect.Options{NuisancePerLoopYear: c.Detect.NuisancePerLoopYear}}
	if in.Loop, err = loopOf(c.Loops, name); err != nil {
		return in, nil, err
	}
	if in.From == 0 {
		end := time.Now().UnixMilli()
		if in.To != 0 {
			end = in.To
		}
		in.From = end - 14*24*time.Hour.Milliseconds()
	}
	write, done, err := h.exporter(c)
	if err != nil {
		return in, nil, err
	}
	defer func() {
		if err != nil {
			done()
		}
	}()
	frames := func(l *configs.Loop) iter.Seq2[collector.Frame, error] {
		e := api.Export{What: api.ExportTrend, Loops: []string{l.Name}, From: in.From, To: in.To}
		if e.To == 0 {
			e.To = noEnd
		}
		return func(yield func(collector.Frame, error) bool) {
			r, w := io.Pipe()
			go func() { w.CloseWithError(write(e, w)) }()
			defer r.Close() // ends the writer, too
			for f, err := range framesOf(h.ctx, []string{"-"}, r, l) {
				if !yield(f, err) {
					return
				}
			}
		}
	}
	in.Frames = frames(in.Loop)
	if in.Partners, err = partners(c.Loops, in.Loop, in.Detect, frames); err != nil {
		return in, done, err
	}
	in.Findings, err = h.heard(dial(c.Data), name)
	if errors.Is(err, errNotRunning) {
		return in, done, nil // the dossier judges the loop itself
	}
	in.Others, in.Source = true, "running watch"
	return in, done, err
}

// heard gives the findings behind the episodes of the running watch: all of the
// loop, of the others the one that leads each.
func (h *house) heard(cl client, name string) ([]detect.Finding, error) {
	var all []api.Episode
	if err := cl.get(h.ctx, "/api/episodes", &all); err != nil {
		return nil, err
	}
	out := []detect.Finding{}
	for _, e := range all {
		if !slices.Contains(e.Loops, name) {
			out = append(out, e.Finding)
			continue
		}
		var whole struct {
			Journal []alert.Entry `json:"journal"`
		}
		if err := cl.get(h.ctx, "/api/episodes/"+url.PathEscape(e.ID), &whole); err != nil {
			return nil, err
		}
		for _, j := range whole.Journal {
			if j.Finding != nil {
				out = append(out, *j.Finding)
			}
		}
	}
	return out, nil
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
// where they are the other half of a cascade.
func partners(list []*configs.Loop, of *configs.Loop, o detect.Options, frames func(*configs.Loop) iter.Seq2[collector.Frame, error]) ([]dossier.Partner, error) {
	var out []dossier.Partner
	for _, k := range configs.Structure(list) {
		relation := ""
		for _, name := range k.Loops {
			if name == of.Name {
				relation = string(k.Relation)
			}
		}
		if relation == "" {
			continue
		}
		for i, name := range k.Loops {
			if name == of.Name {
				continue
			}
			p := dossier.Partner{Loop: name, Relation: relation}
			if k.Relation == configs.CascadePair {
				p.Relation = []string{"outer", "inner"}[i]
				l, err := loopOf(list, name)
				if err != nil {
					return out, err
				}
				w := detect.New(l, 0, o)
				for f, err := range frames(l) {
					if err != nil {
						return out, fmt.Errorf("frames of loop %s: %w", name, err)
					}
					w.Step(&f, func(*detect.Finding) {})
				}
				p.RecoveryS = w.View().TimeScaleS
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
