package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"runtime/debug"
	"strings"
	"time"

	sd "github.com/coreos/go-systemd/v22/daemon"
	"github.com/spf13/cobra"

	"midwatch/cmd/internal/daemon"
	"midwatch/configs"
	"midwatch/store"
)

func runVerb(h *house) *cobra.Command {
	var config string
	verbose := false
	c := &cobra.Command{
		Use:   "run -c FILE",
		Short: "watches: the daemon",
		Long: `Watches the loops of the configuration until it is told to end: reads their
values (it never writes to the plant), keeps their trends in the data folder,
judges them and tells those whom the routes name.

SIGTERM and SIGINT end it cleanly; a second one shortens the end. SIGHUP reads
the configuration and the loop list anew: what did not change goes on without a
break; a mistake in them leaves everything as it was.

Try the configuration first: midwatch check -c FILE --connect`,
		Args: cobra.NoArgs,
		RunE: func(*cobra.Command, []string) error { return h.watch(config, verbose) },
	}
	configFlag(c, &config)
	c.Flags().BoolVarP(&verbose, "verbose", "v", false, "log details")
	return c
}

// testOnlyAdjust changes the configuration of a watch.
var testOnlyAdjust = func(*configs.Config) {}

// testOnlySettle is how long the desk waits for what folds into a message; 0: its
// default.
var testOnlySettle time.Duration

const (
	stopWithin  = 20 * time.Second // below what the unit waits
	hurryWithin = 3 * time.Second  // after a second signal
)

// collectPercent is how far the heap may grow between collections. What the loops
// hold lives long and has few pointers: collecting often costs little and saves
// a third of what 50,000 loops would take.
const collectPercent = 25

func (h *house) watch(config string, verbose bool) error {
	if os.Getenv("GOGC") == "" {
		debug.SetGCPercent(collectPercent)
	}
	c, err := loadConfig(config)
	if err != nil {
		return err
	}
	testOnlyAdjust(c)
	log := newLog(h.stderr, verbose)
	for _, w := range c.Warnings {
		log.Warn(w)
	}
	exe, err := os.Executable()
	if err != nil {
		return fmt.Errorf("where this program is: %w", err)
	}
	d, err := daemon.New(daemon.Options{
		Config: c, Logger: log, Stdout: h.stdout, Version: facts().Version, Notify: notifier(log),
		Load:  func() (*configs.Config, error) { return loadConfig(config) },
		Check: []string{exe, checkFileName}, Settle: testOnlySettle,
		Serve: daemon.Serve{Page: daemon.ServePage},
	})
	if err != nil {
		return err
	}
	err = d.Start()
	if err == nil {
		log.Info("watching", "loops", len(c.Loops), "sources", len(c.Sources), "data", c.Data, "page", d.Addr())
		h.untilTold(d, log)
		log.Info("stopping")
	}
	return errors.Join(err, h.stop(d))
}

// untilTold reloads when asked to, and returns when told to end.
func (h *house) untilTold(d *daemon.Daemon, log *slog.Logger) {
	for {
		select {
		case <-h.ctx.Done():
			return
		case <-h.reload:
			if err := d.Reload(h.ctx); err != nil && h.ctx.Err() == nil {
				for line := range strings.SplitSeq(err.Error(), "\n") {
					log.Error("not reloaded: everything goes on as it was", "err", line)
				}
			}
		}
	}
}

func (h *house) stop(d *daemon.Daemon) error {
	ctx, cancel := context.WithTimeout(context.Background(), stopWithin)
	defer cancel()
	go func() {
		select {
		case <-h.hurry:
			time.AfterFunc(hurryWithin, cancel)
		case <-ctx.Done():
		}
	}()
	return d.Stop(ctx)
}

// newLog writes to standard error. The journal has its own times.
func newLog(w io.Writer, verbose bool) *slog.Logger {
	o := &slog.HandlerOptions{Level: slog.LevelInfo}
	if verbose {
		o.Level = slog.LevelDebug
	}
	if os.Getenv("JOURNAL_STREAM") != "" {
		o.ReplaceAttr = func(groups []string, a slog.Attr) slog.Attr {
			if len(groups) == 0 && a.Key == slog.TimeKey {
				return slog.Attr{}
			}
			return a
		}
	}
	return slog.New(slog.NewTextHandler(w, o))
}

// notifier tells the service manager, where there is one.
func notifier(log *slog.Logger) func(string) {
	failed := false
	return func(state string) {
		if state == sd.SdNotifyReloading {
			state += "\n" + sd.SdNotifyMonotonicUsec()
		}
		if _, err := sd.SdNotify(false, state); err != nil && !failed {
			failed = true
			log.Warn("the service manager cannot be told", "err", err)
		}
	}
}

const checkFileName = "check-file"

// checkFileVerb looks at a file of the data folder: run in a child after an
// unclean stop, since a damaged file can end the process that opens it.
func checkFileVerb(*house) *cobra.Command {
	return &cobra.Command{
		Use: checkFileName + " FILE", Hidden: true, Args: cobra.ExactArgs(1),
		Short: "checks every page and checksum of a file of the data folder",
		Long:  "Checks every page and checksum of a file of the data folder. The file must not be\nin use.",
		RunE:  func(_ *cobra.Command, args []string) error { return store.CheckAlone(args[0]) },
	}
}
