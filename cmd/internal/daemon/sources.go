package daemon

import (
	"context"
	"fmt"
	"log/slog"
	"math"
	"path/filepath"
	"reflect"
	"slices"
	"sync"
	"time"

	"midwatch/collector"
	"midwatch/collector/mqtt"
	"midwatch/collector/opcua"
	"midwatch/configs"
	"midwatch/store"
)

// SourceEnv is what the constructor of a source is handed.
type SourceEnv struct {
	Site     string
	Index    uint16 // number of the source in life groups
	Bindings []collector.Binding
	Data     string // data folder
	Births   mqtt.BirthStore
	Clock    func() time.Time
	Log      *slog.Logger
}

// SourceKind is one kind of source: a row of [SourceKinds].
type SourceKind struct {
	Kind string
	Has  func(*configs.Source) bool
	New  func(configs.Source, SourceEnv) (collector.Source, error)
}

// SourceKinds lists the kinds of sources. Adding one is its package and a row.
var SourceKinds = []SourceKind{
	{"opcua", func(s *configs.Source) bool { return s.OPCUA != nil }, func(s configs.Source, e SourceEnv) (collector.Source, error) {
		return opcua.New(*s.OPCUA, s.Name, e.Index, e.Bindings, opcua.Options{Logger: e.Log, KeyDir: filepath.Join(e.Data, "keys"), Clock: e.Clock})
	}},
	{"mqtt", func(s *configs.Source) bool { return s.MQTT != nil }, func(s configs.Source, e SourceEnv) (collector.Source, error) {
		return mqtt.New(*s.MQTT, s.Name, e.Site, e.Index, e.Bindings, mqtt.Options{Logger: e.Log, StateDir: e.Data, Births: e.Births, Now: e.Clock})
	}},
}

// NewSource makes a source of its configuration.
func NewSource(kinds []SourceKind, s configs.Source, e SourceEnv) (collector.Source, error) {
	for _, k := range kinds {
		if k.Has(&s) {
			src, err := k.New(s, e)
			if err != nil {
				return nil, fmt.Errorf("source %s (%s): %w", s.Name, k.Kind, err)
			}
			return src, nil
		}
	}
	return nil, fmt.Errorf("source %s: no such kind; hint: give the key opcua or mqtt", s.Name)
}

var roles = map[string]collector.Role{"pv": collector.RolePV, "sp": collector.RoleSP, "op": collector.RoleOP,
	"alive_tag": collector.RoleAlive, "gain_tag": collector.RoleGain, "reset_tag": collector.RoleReset,
	"position": collector.RolePosition, "feedforward": collector.RoleFeedforward}

// Bindings gives what each source has to deliver for a loop list, by the name of
// the source; ids are the indexes, nil loops are left out.
func Bindings(loops []*configs.Loop) (map[string][]collector.Binding, error) {
	out := map[string][]collector.Binding{}
	modes := map[string]*collector.ModeMap{}
	for i, l := range loops {
		if l == nil {
			continue
		}
		if modes[l.ModeMap] == nil {
			m, err := collector.ParseModeMap(l.ModeMap)
			if err != nil {
				return nil, fmt.Errorf("loop %s: mode_map: %w", l.Name, err)
			}
			modes[l.ModeMap] = m
		}
		sample := int64(1000)
		if l.SampleS > 0 {
			sample = max(1, int64(math.Round(1000*l.SampleS)))
		}
		modeTags, active, suppress := 0, 0, 0
		for _, t := range l.Tags() {
			b := collector.Binding{Loop: collector.LoopID(i), Name: l.Name, Role: roles[t.Column], Address: t.Address, Sample: sample}
			switch t.Column {
			case "mode":
				b.Role, b.Modes = collector.RoleMode+collector.Role(modeTags), modes[l.ModeMap]
				modeTags++
			case "active_when":
				b.Role, b.Modes = collector.CondRole(false, active), conditionWord(l.ActiveWhen.Terms[active])
				active++
			case "suppress_when":
				b.Role, b.Modes = collector.CondRole(true, suppress), conditionWord(l.SuppressWhen.Terms[suppress])
				suppress++
			}
			out[t.Source] = append(out[t.Source], b)
		}
	}
	return out, nil
}

func conditionWord(t configs.Term) *collector.ModeMap {
	if t.Word == "" {
		return nil
	}
	return collector.WordMap(t.Word)
}

// feed is a source that runs.
type feed struct {
	conf     configs.Source
	index    uint16
	bindings []collector.Binding
	source   collector.Source
	groups   *joined
	cancel   context.CancelFunc
	done     chan struct{}
	began    int64 // wall clock at which it was made, ms UTC

	mu  sync.Mutex
	err error // why Run ended by itself
}

// same says that a feed needs no restart to serve this configuration.
func (f *feed) same(s configs.Source, bindings []collector.Binding) bool {
	a, b := f.conf, s
	a.Where, b.Where = configs.Position{}, configs.Position{}
	return reflect.DeepEqual(a, b) && slices.EqualFunc(f.bindings, bindings, func(x, y collector.Binding) bool {
		return reflect.DeepEqual(x, y)
	})
}

// start runs the source until stop.
func (f *feed) start(in collector.Intake, log *slog.Logger) {
	ctx, cancel := context.WithCancel(context.Background())
	f.cancel, f.done = cancel, make(chan struct{})
	f.groups = &joined{Intake: in}
	go func() {
		defer close(f.done)
		err := f.source.Run(ctx, f.groups)
		if err != nil && ctx.Err() == nil {
			log.Error("a source cannot go on", "source", f.conf.Name, "err", err)
			f.mu.Lock()
			f.err = err
			f.mu.Unlock()
		}
	}()
}

// state is that of the source, or that it ended.
func (f *feed) state() collector.SourceState {
	st := f.source.State()
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.err != nil {
		st.Link, st.Problem = "down", f.err.Error()
	}
	if st.Since == 0 {
		st.Since = f.began // it has not tried yet
	}
	if st.Name == "" {
		st.Name = f.conf.Name
	}
	return st
}

// leave says to the intake that the life groups of a source that has ended have
// no loops any more.
func (f *feed) leave(in collector.Intake) {
	f.groups.mu.Lock()
	defer f.groups.mu.Unlock()
	for _, g := range f.groups.all {
		in.Join(g, nil)
	}
}

// joined remembers the life groups of a source.
type joined struct {
	collector.Intake
	mu  sync.Mutex
	all []collector.Group
}

func (j *joined) Join(g collector.Group, loops []collector.LoopID) {
	j.mu.Lock()
	if !slices.Contains(j.all, g) {
		j.all = append(j.all, g)
	}
	j.mu.Unlock()
	j.Intake.Join(g, loops)
}

// births keeps what Sparkplug births said, in the state.
type births struct {
	state  *store.State
	bucket string
}

func (b births) Get(key string) (v []byte, err error) {
	err = b.state.View(func(tx *store.Tx) error { v = tx.Get(b.bucket, []byte(key)); return nil })
	return v, err
}

func (b births) Put(key string, value []byte) error {
	return b.state.Update(func(tx *store.Tx) error {
		if len(value) == 0 {
			return tx.Delete(b.bucket, []byte(key))
		}
		return tx.Put(b.bucket, []byte(key), value)
	})
}
