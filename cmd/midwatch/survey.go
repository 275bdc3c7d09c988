package main

import (
	"bytes"
	"cmp"
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"slices"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"midwatch/cmd/internal/daemon"
	"midwatch/configs"
)

// surveyFlags are the flags of survey.
type surveyFlags struct {
	config, out string
	sources     []string
	within      time.Duration
}

func surveyVerb(h *house) *cobra.Command {
	var f surveyFlags
	c := &cobra.Command{
		Use:   "survey -c FILE [--source NAME] [-o loops.csv]",
		Short: "drafts a loop list from what the sources hold",
		Long: `Looks through the sources of the configuration for what is named like a
controller: a PV with an OP or an SP beside it, under the usual names. Of each it
drafts a row of the loop list, with the range and the unit that the source states.

An OPC UA server is browsed. At an MQTT broker only what speaks while it is
listened to, or is retained, can be found: listen longer for slow publishers. It
reads only; nothing is changed on any server.

What comes out is a draft. A person who knows the plant has to check every row:
that the tags belong together and are those of the controller in service; action,
gain and reset as on the faceplate with their units; limits, service and cascades.
Names prove nothing. Nothing is watched because it is in a draft.

The configuration needs its sources only; leave loop_list out of it until there is
one. Then: midwatch check -c FILE --connect`,
		Args: cobra.NoArgs,
		RunE: func(*cobra.Command, []string) error { return h.survey(&f) },
	}
	configFlag(c, &f.config)
	c.Flags().StringArrayVar(&f.sources, "source", nil, "only this source; may be given several times")
	c.Flags().StringVarP(&f.out, "out", "o", "", "file to write, a new one; standard output when left out")
	c.Flags().DurationVar(&f.within, "within", 30*time.Second, "how long a broker is listened to, and browsing a server may take")
	return c
}

// surveyor is the optional ability of a source to draft loops. It reads only.
type surveyor interface {
	Survey(ctx context.Context) ([]*configs.Loop, error)
}

func (h *house) survey(f *surveyFlags) error {
	if f.within <= 0 {
		return usagef("--within %s is no time to look around in; hint: 30s", f.within)
	}
	c, err := loadConfig(f.config)
	if err != nil {
		return err
	}
	if len(c.Sources) == 0 {
		return usagef("%s has no sources; hint: add the server or broker to look through", c.File)
	}
	for _, name := range f.sources {
		if !slices.ContainsFunc(c.Sources, func(s configs.Source) bool { return s.Name == name }) {
			return usagef("--source %s: there is no such source; hint: %s", name, sourceNames(c))
		}
	}
	if f.out != "" {
		if _, err := os.Lstat(f.out); err == nil { // before anybody waits for nothing
			return there(f.out)
		}
	}
	var found []*configs.Loop
	var failed []error
	for i, s := range c.Sources {
		if len(f.sources) > 0 && !slices.Contains(f.sources, s.Name) {
			continue
		}
		loops, err := h.surveySource(c, uint16(i), f.within)
		switch {
		case h.ctx.Err() != nil:
			return errors.New("stopped by a signal: nothing is written")
		case err != nil:
			failed = append(failed, fmt.Errorf("survey: %w", err))
		default:
			fmt.Fprintf(h.stderr, "%s: %s\n", s.Name, loopCount(len(loops)))
		}
		found = append(found, loops...)
	}
	if len(found) == 0 {
		if len(failed) == 0 {
			failed = append(failed, errors.New("survey: no names look like those of a controller; hint: listen longer with --within, or write the loop list by hand"))
		}
		return errors.Join(failed...)
	}
	apart(found)
	if err := h.writeDraft(f.out, found); err != nil {
		return err
	}
	fmt.Fprintln(h.stderr, "this is a draft from names alone: a person has to check every row, and add action and tuning, before it is used")
	return errors.Join(failed...)
}

func (h *house) surveySource(c *configs.Config, index uint16, within time.Duration) ([]*configs.Loop, error) {
	s := c.Sources[index]
	log := slog.New(slog.NewTextHandler(h.stderr, &slog.HandlerOptions{Level: slog.LevelError}))
	src, err := daemon.NewSource(daemon.SourceKinds, s, daemon.SourceEnv{Site: c.Site.Name, Index: index, Data: c.Data, Clock: time.Now, Log: log})
	if err != nil {
		return nil, err
	}
	v, ok := src.(surveyor)
	if !ok {
		return nil, fmt.Errorf("source %s: this kind cannot be looked through; hint: write its loops by hand", s.Name)
	}
	ctx, cancel := context.WithTimeout(h.ctx, within)
	defer cancel()
	loops, err := v.Survey(ctx)
	if err != nil && !strings.HasPrefix(err.Error(), "source ") {
		err = fmt.Errorf("source %s: %w", s.Name, err)
	}
	slices.SortStableFunc(loops, func(a, b *configs.Loop) int { return strings.Compare(a.Name, b.Name) })
	return loops, err
}

// apart gives loops of several sources that bear one name names of their own.
func apart(loops []*configs.Loop) {
	taken := map[string]bool{}
	for _, l := range loops {
		name := l.Name
		for n := 1; taken[name]; n++ {
			suffix := "." + l.Source
			if n > 1 {
				suffix = fmt.Sprintf(".%s.%d", l.Source, n)
			}
			name = cut(l.Name, maxLoopName-len(suffix)) + suffix
		}
		l.Name, taken[name] = name, true
	}
}

const maxLoopName = 64 // characters

func cut(s string, most int) string {
	r := []rune(s)
	return string(r[:min(len(r), most)])
}

const draftHead = `# A DRAFT, made from the names that the sources show. A person who knows the plant
# has to check every row: tags, ranges and units against the controller in service;
# action, gain and reset with their units are missing and stand on the faceplate.
`

// writeDraft writes the loops as a loop list, to a new file or to standard output.
func (h *house) writeDraft(path string, loops []*configs.Loop) error {
	var b bytes.Buffer
	b.WriteString(draftHead)
	if err := configs.WriteLoopList(&b, loops); err != nil {
		return err
	}
	// A server may bear names that a loop list does not take.
	if _, err := configs.ReadLoopList(bytes.NewReader(b.Bytes()), cmp.Or(path, "draft")); err != nil {
		for line := range strings.SplitSeq(err.Error(), "\n") {
			fmt.Fprintf(h.stderr, "to be mended by hand: %s\n", line)
		}
	}
	if path == "" {
		_, err := h.stdout.Write(b.Bytes())
		return err
	}
	if err := writeNew(path, func(w io.Writer) error { _, err := w.Write(b.Bytes()); return err }); err != nil {
		return err
	}
	fmt.Fprintln(h.stdout, path)
	return nil
}

func sourceNames(c *configs.Config) string {
	var names []string
	for _, s := range c.Sources {
		names = append(names, s.Name)
	}
	return strings.Join(names, ", ")
}

func loopCount(n int) string {
	if n == 1 {
		return "1 loop drafted"
	}
	return fmt.Sprintf("%d loops drafted", n)
}
