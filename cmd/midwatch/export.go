package main

import (
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"os"
	"path/filepath"
	"time"

	"github.com/spf13/cobra"

	"midwatch/alert/page/api"
	"midwatch/cmd/internal/daemon"
	"midwatch/configs"
)

// noEnd is the year 10000, ms UTC.
const noEnd = 253402300800000

// exportFlags are the flags of export.
type exportFlags struct {
	config, dir, from, to string
	loops                 []string
	trend, memory         bool
}

func exportVerb(h *house) *cobra.Command {
	var f exportFlags
	c := &cobra.Command{
		Use:   "export -c FILE (--dir DIR | --trend)",
		Short: "writes trends, loop list and memories to files",
		Long: `Writes what the data folder keeps, so that it can be judged again elsewhere:
loops.csv (the effective loop list), trend.csv, and with --memory memory.jsonl
(what the loops had learned at the start of the span; the trend of each loop then
begins where its memory ends). --trend writes the trend alone to standard output.

  midwatch export -c midwatch.yaml --dir case-17 --from 2026-01-04T00:00:00Z --memory
  midwatch replay --loops case-17/loops.csv --memory case-17/memory.jsonl case-17/trend.csv

It works with and without a running watch. Files that are there are not written
over.`,
		Args: cobra.NoArgs,
		RunE: func(*cobra.Command, []string) error { return h.export(&f) },
	}
	configFlag(c, &f.config)
	c.Flags().StringVar(&f.dir, "dir", "", "folder to write to; made if need be")
	c.Flags().BoolVar(&f.trend, "trend", false, "write the trend to standard output")
	c.Flags().StringVar(&f.from, "from", "", "begin of the span, such as 2026-01-04T02:00:00Z; default all")
	c.Flags().StringVar(&f.to, "to", "", "end of the span")
	c.Flags().StringSliceVar(&f.loops, "loop", nil, "loops to write; default all")
	c.Flags().BoolVar(&f.memory, "memory", false, "write memories too")
	return c
}

func (h *house) export(f *exportFlags) error {
	if (f.dir == "") != f.trend {
		return usagef("where to is not clear; hint: --dir DIR, or --trend for standard output")
	}
	if f.trend && f.memory {
		return usagef("--memory goes to a file; hint: use --dir")
	}
	e := api.Export{Loops: f.loops, To: noEnd}
	for _, t := range []struct {
		flag, s string
		to      *int64
	}{{"--from", f.from, &e.From}, {"--to", f.to, &e.To}} {
		if t.s == "" {
			continue
		}
		at, err := time.Parse(time.RFC3339Nano, t.s)
		if err != nil {
			return usagef("%s %q is no time; hint: write 2026-01-04T02:31:10Z", t.flag, t.s)
		}
		*t.to = at.UnixMilli()
	}
	c, err := loadPlain(f.config)
	if err != nil {
		return err
	}
	write, done, err := h.exporter(c)
	if err != nil {
		return err
	}
	defer done()
	if f.trend {
		e.What = api.ExportTrend
		return write(e, h.stdout)
	}
	if err := os.MkdirAll(f.dir, 0o750); err != nil {
		return err
	}
	what := []struct{ what, file string }{{api.ExportLoops, "loops.csv"}, {api.ExportTrend, "trend.csv"}}
	if f.memory {
		what = append(what, struct{ what, file string }{api.ExportMemory, "memory.jsonl"})
	}
	e.AfterMemory = f.memory
	for _, x := range what {
		e.What = x.what
		path := filepath.Join(f.dir, x.file)
		if err := writeNew(path, func(w io.Writer) error { return write(e, w) }); err != nil {
			return err
		}
		fmt.Fprintln(h.stdout, path)
	}
	return nil
}

// exporter writes from the running watch, or from the data folder.
func (h *house) exporter(c *configs.Config) (write func(api.Export, io.Writer) error, done func(), err error) {
	cl := dial(c.Data)
	var s api.Status
	err = cl.get(h.ctx, "/api/status", &s)
	if err == nil {
		return func(e api.Export, w io.Writer) error { return h.exportFrom(cl, e, w) }, func() {}, nil
	}
	if !errors.Is(err, errNotRunning) {
		return nil, nil, err
	}
	f, err := daemon.Look(c)
	if err != nil {
		return nil, nil, err
	}
	return func(e api.Export, w io.Writer) error { return f.Export(h.ctx, w, e) }, func() { _ = f.Close() }, nil // opened for reading only
}

func (h *house) exportFrom(cl client, e api.Export, w io.Writer) error {
	q := url.Values{"what": {e.What}, "loop": e.Loops, "from": {time.UnixMilli(e.From).UTC().Format(time.RFC3339Nano)}}
	if e.To != noEnd {
		q.Set("to", time.UnixMilli(e.To).UTC().Format(time.RFC3339Nano))
	}
	if e.AfterMemory {
		q.Set("after_memory", "1")
	}
	resp, err := cl.do(h.ctx, http.MethodGet, "/api/export?"+q.Encode(), nil)
	if err != nil {
		return err
	}
	defer resp.Body.Close()
	if _, err := io.Copy(w, resp.Body); err != nil {
		return fmt.Errorf("the export broke off: %w; hint: what is written is not whole", err)
	}
	return nil
}

// writeNew writes a file that is not there yet; one that could not be finished
// is removed.
func writeNew(path string, write func(io.Writer) error) error {
	f, err := os.OpenFile(path, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o640)
	if errors.Is(err, os.ErrExist) {
		return there(path)
	}
	if err != nil {
		return err
	}
	if err := errors.Join(write(f), f.Close()); err != nil {
		return errors.Join(err, os.Remove(path))
	}
	return nil
}

func there(path string) error {
	return fmt.Errorf("%s is there already and is not written over; hint: name another one", path)
}
