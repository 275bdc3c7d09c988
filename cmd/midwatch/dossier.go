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
	"os"
	"path/filepath"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"midwatch/alert/dossier"
	"midwatch/cmd/internal/daemon"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

func dossierVerb(h *house) *cobra.Command {
	var config, loops, from, to, out, note string
	var trends []string
	c := &cobra.Command{
		Use:   "dossier [--trend FILE.csv --loops LOOPS.csv] [--from TIME --to TIME] [-o FILE] LOOP",
		Short: "gathers what a tuning session needs to know of a loop",
		Long: `Gathers what a tuning session needs to know of a loop: what was seen, measurement
and final element, outside causes, the tuning in service, the process where its
moves show it, candidates with their reasons or the test that would make them
possible, and before and after of tuning changes. It changes nothing.

Three files are written: FILE (HTML, one file, prints), and beside it the same as
JSON and the trend as CSV.

  midwatch dossier --trend january.csv.gz --loops loops.csv AIC-204
  midwatch dossier --trend week.csv --loops loops.csv --from 2026-01-04T00:00:00Z -o aic-204.html AIC-204

With --trend no daemon is needed: the recorded loops are judged as replay does.
Advisory only: no change without your site's management of change and a
qualified person.`,
		Args: cobra.ExactArgs(1),
		RunE: func(_ *cobra.Command, args []string) error {
			span, err := parseSpan(from, to)
			if err != nil {
				return err
			}
			if len(trends) == 0 {
				return usagef("no trend; hint: --trend FILE.csv with --loops LOOPS.csv")
			}
			list, budget, err := loadLoops(config, loops)
			if err != nil {
				return err
			}
			o := detect.Options{NuisancePerLoopYear: budget}
			in, err := h.fromTrend(list, args[0], trends, o, span)
			if err != nil {
				return err
			}
			in.AsLeft = note
			return h.writeDossier(in, out)
		},
	}
	c.Flags().StringVarP(&config, "config", "c", "", "configuration: its loop list and detect settings")
	c.Flags().StringVar(&loops, "loops", "", "loop list CSV")
	c.Flags().StringArrayVar(&trends, "trend", nil, "recorded trend CSV; may be given several times")
	c.Flags().StringVar(&from, "from", "", "begin of the span, RFC 3339; default all there is")
	c.Flags().StringVar(&to, "to", "", "end of the span")
	c.Flags().StringVarP(&out, "output", "o", "", "HTML file to write; default LOOP.html")
	c.Flags().StringVar(&note, "as-left", "", "the tuner's own record of what was changed, for chapter 8")
	return c
}

// parseSpan reads --from and --to, ms UTC; 0 is open.
func parseSpan(from, to string) (span [2]int64, err error) {
	for i, s := range []string{from, to} {
		if s == "" {
			continue
		}
		t, err := time.Parse(time.RFC3339Nano, s)
		if err != nil {
			return span, usagef("%q is no time; hint: as 2026-01-04T06:00:00Z", s)
		}
		span[i] = t.UnixMilli()
	}
	if span[1] != 0 && span[0] >= span[1] {
		return span, usagef("--from %s is not before --to %s; hint: the span is from up to, without, to", from, to)
	}
	return span, nil
}

// fromTrend judges the recorded loops as replay does, then gathers the frames of
// one.
func (h *house) fromTrend(list []*configs.Loop, name string, files []string, o detect.Options, span [2]int64) (dossier.Input, error) {
	in := dossier.Input{Detect: o, From: span[0], To: span[1], Others: len(list) > 1, Source: "recorded trend: " + baseNames(files)}
	for _, l := range list {
		if l.Name == name {
			in.Loop = l
		}
	}
	if in.Loop == nil {
		return in, usagef("loop %q is not in the loop list; hint: its names are in the column loop", name)
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
	in.Partners, err = partners(list, in.Loop, func(l *configs.Loop) (detect.View, error) {
		w := detect.New(l, 0, o)
		for f, err := range framesOf(h.ctx, files, l) {
			if err != nil {
				return detect.View{}, err
			}
			w.Step(&f, func(*detect.Finding) {})
		}
		return w.View(), nil
	})
	in.Frames = framesOf(h.ctx, files, in.Loop)
	return in, err
}

// framesOf reads the frames of one loop from trend files.
func framesOf(ctx context.Context, files []string, l *configs.Loop) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		r, err := trend.Open(files, []*configs.Loop{l}, trend.Options{})
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
		yield(collector.Frame{}, ctx.Err())
	}
}

// partners are the loops that hang together with one, with their usual recovery
// where they are the other half of a cascade.
func partners(list []*configs.Loop, of *configs.Loop, view func(*configs.Loop) (detect.View, error)) ([]dossier.Partner, error) {
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
				for _, l := range list {
					if l.Name != name {
						continue
					}
					v, err := view(l)
					if err != nil {
						return out, err
					}
					p.RecoveryS = v.TimeScaleS
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

// writeDossier writes the three files, whole or not at all.
func (h *house) writeDossier(in dossier.Input, out string) error {
	in.Made, in.Version = time.Now(), facts().Version
	d, err := dossier.Build(in)
	if err != nil {
		return err
	}
	if out == "" {
		out = fileName(in.Loop.Name) + ".html"
	}
	base := strings.TrimSuffix(out, filepath.Ext(out))
	for _, f := range []struct {
		path  string
		write func(io.Writer) error
	}{{base + ".csv", d.Trend}, {base + ".json", d.JSON}, {out, d.HTML}} {
		if err := writeWhole(f.path, f.write); err != nil {
			return err
		}
	}
	for _, l := range d.Summary {
		fmt.Fprintf(h.stdout, "%s: %s\n", l.About, l.Text)
	}
	fmt.Fprintf(h.stdout, "written: %s, %s, %s\n", out, base+".json", base+".csv")
	return nil
}

// fileName is a loop's name as part of a file name, percent-encoded.
func fileName(loop string) string {
	var b strings.Builder
	for _, c := range []byte(loop) {
		if c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' || c >= '0' && c <= '9' || c == '-' || c == '_' || c == '.' && b.Len() > 0 {
			b.WriteByte(c)
		} else {
			fmt.Fprintf(&b, "%%%02X", c)
		}
	}
	return b.String()
}

// writeWhole writes a file beside its name first, so that nobody reads half.
func writeWhole(path string, write func(io.Writer) error) (err error) {
	f, err := os.CreateTemp(filepath.Dir(path), ".midwatch-*")
	if err != nil {
		return fmt.Errorf("writing %s: %w", path, err)
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(f.Name()))
		}
	}()
	if err = write(f); err != nil {
		return errors.Join(err, f.Close())
	}
	if err = errors.Join(f.Chmod(0o644), f.Close()); err != nil {
		return fmt.Errorf("writing %s: %w", path, err)
	}
	if err = os.Rename(f.Name(), path); err != nil {
		return fmt.Errorf("writing %s: %w", path, err)
	}
	return nil
}
