package daemon

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/alert/send"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/store"
)

// openStore opens state and window.
func (d *Daemon) openStore() error {
	data := d.cfg.Data
	if err := os.MkdirAll(data, 0o750); err != nil {
		return fmt.Errorf("data folder: %w; hint: make it and give it to the user midwatch runs as", err)
	}
	path := filepath.Join(data, stateFile)
	if err := d.checkFiles(path); err != nil {
		return err
	}
	state, err := store.OpenState(path)
	if errors.Is(err, store.ErrInUse) {
		return fmt.Errorf("data folder %s is in use by another midwatch; hint: `midwatch status` asks that one; two need two data folders", data)
	}
	if err != nil {
		return fmt.Errorf("data folder %s: %w", data, err)
	}
	d.state = state
	d.made.add("state", func(context.Context) error { return state.Close() })
	for _, p := range state.Problems() {
		d.log.Error("the state was damaged", "file", p.Path, "what", p.Text)
	}
	var known uint32
	if err := state.View(func(tx *store.Tx) error {
		if b := tx.Get(bucketDaemon, []byte(keyFlush)); len(b) == 4 {
			known = binary.BigEndian.Uint32(b)
		}
		return nil
	}); err != nil {
		return err
	}
	o := windowOptions(d.cfg)
	o.KnownFlush, o.Problem = known, d.storeProblem
	w, err := store.OpenWindow(filepath.Join(data, windowDir), o)
	if err != nil {
		return fmt.Errorf("trends in %s: %w", data, err)
	}
	d.window = w
	d.made.add("window", func(context.Context) error { return w.Close() })
	return nil
}

// chunkFrames is what one chunk of the store holds of a loop; see
// [store.Options].
const chunkFrames = 1 << 14

// windowOptions keeps slices at six hours and chunks at up to ten minutes,
// whatever the interval of flushes; a disk that stalls for two intervals costs
// nothing.
func windowOptions(c *configs.Config) store.Options {
	flush := max(c.Keep.Flush, time.Millisecond)
	fastest := 1.0 // s between frames
	for _, l := range c.Loops {
		if l.SampleS > 0 {
			fastest = min(fastest, l.SampleS)
		}
	}
	pending := max(160, int(3*flush.Seconds()/fastest))
	return store.Options{SizeBytes: c.Keep.Size, PendingFrames: pending, SliceFlushes: max(2, int(6*time.Hour/flush)),
		ChunkFlushes: max(1, min(int(10*time.Minute/flush), chunkFrames/pending))}
}

// checkFiles has the files of an unclean stop looked at by a child: a damaged
// file can end the process that opens it.
func (d *Daemon) checkFiles(state string) error {
	if d.o.Check == nil {
		return nil
	}
	unclean, err := store.UncleanStop(state)
	if err != nil || !unclean {
		return nil // in use: said by the open that follows
	}
	d.log.Warn("the last stop was not a clean one: checking the data folder")
	files, err := store.WindowFiles(filepath.Join(d.cfg.Data, windowDir))
	if err != nil {
		return err
	}
	check := []string{state}
	if n := len(files); n > 0 {
		check = append(check, files[n-1])
	}
	for _, path := range check {
		err := store.CheckInChild(context.Background(), d.o.Check, path)
		if !errors.Is(err, store.ErrDamaged) {
			if err != nil {
				d.log.Warn("a file was not checked", "file", path, "err", err)
			}
			continue
		}
		to, err2 := store.SetAside(path)
		if err2 != nil {
			return errors.Join(err, err2)
		}
		d.log.Error("a damaged file was set aside", "file", to, "err", err)
		if path == state {
			if err := d.restoreState(state); err != nil {
				return err
			}
		}
	}
	return nil
}

// restoreState puts the backup of the state in its place, where there is a
// sound one.
func (d *Daemon) restoreState(state string) error {
	backup := state + store.BackupSuffix
	b, err := os.ReadFile(backup)
	if errors.Is(err, os.ErrNotExist) {
		d.log.Error("profiles, episodes and outbox begin anew: there is no backup yet")
		return nil
	}
	if err != nil {
		return fmt.Errorf("backup of the state: %w", err)
	}
	if err := store.CheckInChild(context.Background(), d.o.Check, backup); err != nil {
		d.log.Error("profiles, episodes and outbox begin anew: the backup is no better", "err", err)
		return nil
	}
	fresh := state + ".new"
	if err := os.WriteFile(fresh, b, 0o640); err != nil {
		return fmt.Errorf("backup of the state: %w", err)
	}
	d.log.Error("the backup of the state is used: what changed since is lost")
	return os.Rename(fresh, state)
}

func (d *Daemon) storeProblem(p store.Problem) {
	d.log.Warn("store", "kind", string(p.Kind), "file", p.Path, "what", p.Text)
	d.self.storeSaid(p)
}

// register says to the window which loops there are.
func (d *Daemon) register(roster []*configs.Loop) error {
	loops := []store.Loop{{ID: collector.LoopID(len(roster)), Name: sitesName}}
	for i, l := range roster {
		if l != nil {
			loops = append(loops, store.Loop{ID: collector.LoopID(i), Name: l.Name, Was: l.Was})
		}
	}
	return d.window.Register(loops)
}

// openDesk makes the senders and the desk.
func (d *Daemon) openDesk() error {
	senders, err := send.All(d.cfg.Advise.Senders, d.sendEnv(d.cfg))
	if err != nil {
		return err
	}
	d.senders = senders
	d.made.add("senders", func(context.Context) error { return send.Close(d.senders) })
	d.desk, err = alert.New(alert.Options{Store: alert.On(d.state), Settings: d.deskSettings(d.cfg, senders), Clock: d.clock.Now,
		Seed: uint64(d.clock.Now().UnixNano()), Log: d.log, Settle: d.o.Settle, SettleStale: d.o.Settle, SettleSwing: d.o.Settle})
	if err != nil {
		return err
	}
	d.made.add("desk", func(context.Context) error { d.desk.Stop(); return nil })
	return nil
}

func (d *Daemon) sendEnv(c *configs.Config) send.Env {
	return send.Env{Site: c.Site.Name, Zone: c.Site.Zone, Clock: d.clock.Now, Stdout: d.o.Stdout, Frames: d.window, Log: d.log, Namespaces: namespaces(c)}
}

// namespaces are the topics that midwatch subscribes to.
func namespaces(c *configs.Config) []string {
	mqtt := map[string]string{}
	for _, s := range c.Sources {
		if s.MQTT != nil {
			mqtt[s.Name] = s.MQTT.Payload
		}
	}
	seen := map[string]bool{}
	var out []string
	for _, l := range c.Loops {
		for _, t := range l.Tags() {
			payload, ok := mqtt[t.Source]
			topic := topicOf(t.Address, payload)
			if ok && !seen[topic] {
				seen[topic] = true
				out = append(out, topic)
			}
		}
	}
	return out
}

func (d *Daemon) deskSettings(c *configs.Config, senders map[string]alert.Sender) alert.Settings {
	standing := c.Detect.Standing
	if standing == 0 {
		standing = -1
	}
	return alert.Settings{Site: c.Site.Name, Zone: c.Site.Zone, Loops: c.Loops, Advise: c.Advise, Standing: standing, Names: c.Keep.Names, Keep: c.Keep.Episodes,
		PageURL: c.Page.URL, Senders: senders, Health: d.digestLines}
}

func (d *Daemon) detectOptions() detect.Options {
	return detect.Options{NuisancePerLoopYear: d.cfg.Detect.NuisancePerLoopYear}
}

// topicOf is the topic filter behind an MQTT address.
func topicOf(address, payload string) string {
	topic, _, _ := strings.Cut(address, "#")
	if payload == "sparkplug" {
		group, _, _ := strings.Cut(topic, "/")
		return "spBv1.0/" + group + "/#"
	}
	return topic
}
