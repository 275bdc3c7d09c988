// Package demo runs the ordinary watch over the simulated works Kestrel Fen,
// which stands behind a real OPC UA server and a real MQTT broker in the same
// process. [Run] takes in a recorded day, then watches live with a clock that
// runs 60 times as fast, in a temporary data folder with a configuration and a
// loop list as a site would have them.
//
// What the screen shows comes from the watch by the ways that everybody has: the
// states of loops, the kept frames, and the lines of a log sender.
package demo

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"path/filepath"
	"time"

	"midwatch/cmd/internal/daemon"
	"midwatch/collector"
	"midwatch/collector/plant"
	"midwatch/configs"
)

// Options of a demonstration.
type Options struct {
	Out      io.Writer
	Terminal bool          // Out is a terminal of 80 columns or more
	For      time.Duration // of the live part, on the wall; 0: until the context ends
	Version  string
	Serve    daemon.Serve
}

// factor is how much faster than the wall the clock of the demo runs.
const factor = 60

// seed makes the noise and the loads of the works; any other does as well.
const seed = 1

// silenceS is the silence after which a loop of the demo is out of sight, in
// seconds of the works: 15 s on the wall, so that a machine that is busy for a
// moment is not taken for a dead source.
const silenceS = 15 * factor

// start is when the recorded day begins.
var start = time.Date(2026, 1, 5, 6, 0, 0, 0, time.UTC)

// Run runs the demonstration. The summary is printed even when the context ends
// early. A lost frame or a write to the plant is an error.
func Run(ctx context.Context, o Options) (err error) {
	dir, err := os.MkdirTemp("", "midwatch-demo-")
	if err != nil {
		return fmt.Errorf("folder of the demo: %w; hint: TMPDIR names another place", err)
	}
	defer func() { err = errors.Join(err, os.RemoveAll(dir)) }()
	s := &show{screen: newScreen(o.Out, o.Terminal), dir: dir, shown: map[string]string{}}
	s.screen.print(opening)

	works := plant.Demo(seed, start)
	s.loops = plant.LoopList(plant.Sources{OPCUA: uaSource, MQTT: mqttSource})
	for _, l := range s.loops {
		l.SilenceS = silenceS
	}
	s.truth = works.Truth()
	if err := s.takeIn(ctx, works); err != nil {
		return stopped(ctx, err)
	}
	s.begin = time.UnixMilli(works.Now()).UTC()
	s.clock, s.start = daemon.Held(s.begin, factor)
	srv, err := plant.Serve(context.WithoutCancel(ctx), works, plant.ServeOptions{Factor: 1, Clock: s.clock.Now})
	if err != nil {
		return err
	}
	s.plant = srv
	err = s.live(ctx, o)
	return errors.Join(err, srv.Close(), s.conclude(err == nil))
}

// stopped makes an end asked for during the preparations no failure.
func stopped(ctx context.Context, err error) error {
	if ctx.Err() != nil {
		return nil
	}
	return err
}

const opening = `midwatch watches the simulated water works Kestrel Fen, which stands behind a
real OPC UA server and a real MQTT broker in this process. The watch is the
ordinary one; its clock and that of the works run 60 times as fast. Two loops
have been in trouble since yesterday, four more will be soon.

`

// takeIn lets the works run for a day and keeps what it published.
func (s *show) takeIn(ctx context.Context, works *plant.Plant) error {
	began := time.Now()
	frames := 0
	err := daemon.TakeIn(ctx, s.data(), s.loops, func(yield func(collector.LoopID, collector.Frame) bool) {
		record(works, func(id collector.LoopID, f collector.Frame) bool {
			frames++
			if frames%200_000 == 0 {
				s.screen.working(fmt.Sprintf("taking in a recorded day: %s", clockTime(f.Time)))
			}
			return yield(id, f)
		})
	})
	if err != nil {
		return fmt.Errorf("taking in a recorded day: %w", err)
	}
	s.screen.print(fmt.Sprintf("took in a recorded day: %d loops, %s frames, %.1f s\n", len(s.loops), thousands(frames), time.Since(began).Seconds()))
	return nil
}

// record steps the works through its recorded day.
func record(works *plant.Plant, yield func(collector.LoopID, collector.Frame) bool) {
	for from := start; from.Before(start.Add(plant.DemoDay)); from = from.Add(time.Minute) {
		more := true
		// The works has not passed from: it is told so minute by minute.
		err := works.Record(from, from.Add(time.Minute), func(i int, f collector.Frame) {
			more = more && yield(collector.LoopID(i), f)
		})
		if err != nil || !more {
			return
		}
	}
}

func (s *show) data() string { return filepath.Join(s.dir, "data") }

// live watches until the time is over or the context ends.
func (s *show) live(ctx context.Context, o Options) (err error) {
	c, err := s.configure()
	if err != nil {
		return err
	}
	log := slog.New(slog.NewTextHandler(noteWriter{s.screen}, &slog.HandlerOptions{Level: slog.LevelError}))
	s.watch, err = daemon.New(daemon.Options{Config: c, Logger: log, Clock: s.clock, Stdout: advisories{s}, Version: o.Version, Serve: o.Serve})
	if err != nil {
		return err
	}
	defer func() {
		stop, cancel := context.WithTimeout(context.WithoutCancel(ctx), time.Minute)
		defer cancel()
		err = errors.Join(err, s.watch.Stop(stop))
	}()
	if err := s.watch.Start(); err != nil {
		return err
	}
	s.await(ctx)
	s.start()
	if a := s.watch.Addr(); a != "" && o.Serve.Page != nil {
		s.screen.print("the page: http://" + a + "/\n\n")
	}
	s.wall = time.Now()
	s.trends = newTrends(s.loops, s.watch, s.clock.Now().UnixMilli())
	var over <-chan time.Time
	if o.For > 0 {
		over = time.After(o.For)
	}
	look := time.NewTicker(lookEvery)
	defer look.Stop()
	for {
		select {
		case <-ctx.Done():
			return s.count()
		case <-over:
			return s.count()
		case <-look.C:
			if err := s.refresh(ctx); err != nil {
				return stopped(ctx, err)
			}
		}
	}
}

// connectIn is how long the works waits for its watch.
const connectIn = 20 * time.Second

// await waits until every source is connected: on a busy machine that takes seconds, in
// which the works would go on unseen for minutes. One that does not come is shown as any
// other that is down.
func (s *show) await(ctx context.Context) {
	for deadline := time.Now().Add(connectIn); ctx.Err() == nil && time.Now().Before(deadline); time.Sleep(10 * time.Millisecond) {
		connected := true
		for _, x := range s.watch.Status().Sources {
			connected = connected && x.Link == "watching"
		}
		if connected {
			return
		}
	}
}

const lookEvery = 500 * time.Millisecond

// Names of the sources in the configuration of the demo.
const (
	uaSource   = "works"
	mqttSource = "gateway"
)

// configure writes the loop list and the configuration of the demo, as a site
// would have them, and reads them as run does.
func (s *show) configure() (*configs.Config, error) {
	list, err := os.Create(filepath.Join(s.dir, "loops.csv"))
	if err != nil {
		return nil, err
	}
	if err := errors.Join(configs.WriteLoopList(list, s.loops), list.Close()); err != nil {
		return nil, fmt.Errorf("loop list of the demo: %w", err)
	}
	path := filepath.Join(s.dir, "midwatch.yaml")
	if err := os.WriteFile(path, fmt.Appendf(nil, configuration, s.plant.Endpoint(), s.plant.Broker()), 0o600); err != nil {
		return nil, err
	}
	c, err := configs.Load(path, os.Getenv)
	if err != nil {
		return nil, fmt.Errorf("configuration of the demo: %w", err)
	}
	c.Page.Listen = "127.0.0.1:0" // whatever port is free
	for i := range c.Sources {
		if u := c.Sources[i].OPCUA; u != nil {
			// Shorter than a site may ask for: 0.6 s of the works.
			u.Publish = 10 * time.Millisecond
		}
	}
	return c, nil
}

// configuration is that of a site, but for what speed asks for: the flush of
// trends, and that all is told at once.
const configuration = `site: {name: Kestrel Fen, time_zone: UTC}
data: data
keep: {flush: 60s}
sources:
  - name: works
    opcua: {endpoint: "%s", security: None, publish: 50ms}
  - name: gateway
    mqtt: {broker: "%s", payload: json, time: t}
loop_list: loops.csv
detect: {standing: 0s}
advise:
  senders: [{name: screen, log: {path: "-"}}]
  routes: [{to: [screen]}]
`
