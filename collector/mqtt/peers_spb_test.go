package mqtt

import (
	"context"
	"strconv"
	"strings"
	"sync"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// kept is a birth store in memory.
type kept struct {
	mu sync.Mutex
	m  map[string][]byte
}

func (k *kept) Get(key string) ([]byte, error) {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.m[key], nil
}

func (k *kept) Put(key string, v []byte) error {
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.m == nil {
		k.m = map[string][]byte{}
	}
	if k.m[key] = v; len(v) == 0 {
		delete(k.m, key)
	}
	return nil
}

func TestSparkplugAgainstFeed(t *testing.T) {
	for _, form := range [][]string{{"--alias", "on"}, {"--alias", "on", "--bare"}, {"--alias", "off"}} {
		t.Run(strings.Join(form, " "), func(t *testing.T) {
			t.Parallel()
			m := newMosquitto(t)
			const n = 8
			s := build(t, configs.MQTT{Broker: m.url(), Payload: "sparkplug"}, Options{Births: &kept{}}, feedBindings("sparkplug", n)...)
			r := start(t, s)
			eventually(t, "watching", watching(s))
			args := []string{"--loops", strconv.Itoa(n), "--rate", "4", "--form", "sparkplug", "--seconds", "22"}
			faults := []string{"seq-gap@1", "unknown-alias@2", "null@3", "bad@5", "stale@7", "historical@8.5", "rebirth@9", "realias@10", "ddeath@11", "ndeath@17.1"}
			for _, x := range faults {
				args = append(args, "--fault", x)
			}
			rep, tr := startFeed(t, m, "UTC", append(args, form...)...).end()
			if len(rep.Faults) != len(faults) {
				t.Fatalf("faults %v", rep.Faults)
			}
			eventually(t, "the last death", func() bool { return s.State().Counts["deaths"] == 3 })
			checkSparkplug(t, r, tr, n)
			c := s.State().Counts
			for name, want := range map[string]uint64{"seq_gaps": 1, "unresolved": 1, "historical": 20, "births": 5 + 5 + 5 + 1 + 5, "malformed": 0, "dropped": 0, "ignored": 0} {
				if c[name] != want {
					t.Errorf("count %s is %d, want %d", name, c[name], want)
				}
			}
			lost, uncertain := 0, 0
			for _, x := range r.samples {
				if x.Lost && x.Role == collector.RolePV {
					lost++
				}
				if x.Quality == collector.Uncertain {
					uncertain++
				}
				if x.Unconfirmed {
					t.Fatalf("unconfirmed although the birth was heard: %+v", x)
				}
			}
			if lost != n || uncertain < 4 || uncertain > 6 {
				t.Errorf("%d PV flagged lost (want %d: one gap), %d uncertain (want 5)", lost, n, uncertain)
			}
			dead := map[uint16]int{}
			for _, k := range r.tickList() {
				if !k.Alive {
					dead[k.Group.Sub]++
				}
			}
			// Device of loop 0: its own death, the node's, the end. The others: two.
			if len(dead) != 4 || dead[0] != 3 || dead[1] != 2 {
				t.Errorf("ends by group: %v", dead)
			}
			for _, x := range s.State().Refused {
				if !strings.Contains(x.Why, "offline") {
					t.Errorf("refused %+v", x)
				}
			}
		})
	}
}

// checkSparkplug compares every published row with the sample at its time.
func checkSparkplug(t *testing.T, r *recorder, tr truth, n int) {
	t.Helper()
	rows := 0
	for i := range n {
		name, _ := feedLoop(i)
		type key struct {
			role collector.Role
			time int64
		}
		at := map[key]collector.Sample{}
		for _, role := range []collector.Role{collector.RolePV, collector.RoleSP, collector.RoleOP} {
			for _, x := range r.of(collector.LoopID(i), role) {
				at[key{role, x.Time}] = x
			}
		}
		missing := 0
		for _, row := range tr[name] {
			rows++
			pv, ok := at[key{collector.RolePV, row.time}]
			op, okOP := at[key{collector.RoleOP, row.time}]
			if !ok || !okOP {
				missing++
				continue
			}
			if !sameFloat(pv.Value, row.pv) || op.Value != row.op {
				t.Errorf("%s at %d: PV %v OP %v, published %v %v", name, row.time, pv.Value, op.Value, row.pv, row.op)
			}
			var sp collector.Sample
			for _, x := range r.of(collector.LoopID(i), collector.RoleSP) {
				if x.Time <= row.time {
					sp = x
				}
			}
			if sp.Value != row.sp {
				t.Errorf("%s at %d: SP %v, published %v", name, row.time, sp.Value, row.sp)
			}
		}
		// The feed may note one row that the broken connection swallows.
		if missing > 1 {
			t.Errorf("%s: %d of %d rows did not arrive", name, missing, len(tr[name]))
		}
	}
	if rows < 60*n {
		t.Errorf("only %d rows of truth", rows)
	}
}

// TestSparkplugLateJoiner restarts the watch under a running node that speaks in
// aliases: once without memory, once with.
func TestSparkplugLateJoiner(t *testing.T) {
	t.Parallel()
	m := newMosquitto(t)
	const n = 4
	store := &kept{}
	cfg := configs.MQTT{Broker: m.url(), Payload: "sparkplug"}
	first := build(t, cfg, Options{Births: store}, feedBindings("sparkplug", n)...)
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	done := make(chan error, 1)
	r1 := &recorder{}
	go func() { done <- first.Run(ctx, r1) }()
	eventually(t, "watching", watching(first))
	f := startFeed(t, m, "UTC", "--loops", strconv.Itoa(n), "--rate", "4", "--form", "sparkplug", "--seconds", "600", "--told")
	eventually(t, "values by alias", func() bool { return len(r1.of(0, collector.RolePV)) > 3 })
	cancel()
	<-done

	blind := build(t, cfg, Options{}, feedBindings("sparkplug", n)...)
	rb := start(t, blind)
	with := build(t, cfg, Options{Births: store}, feedBindings("sparkplug", n)...)
	rw := start(t, with)
	eventually(t, "the blind one says what it waits for", func() bool {
		st := blind.State()
		return strings.Contains(st.Problem, "waiting for the birth of KestrelFen/edge-1/bay") && strings.Contains(st.Hint, "host") && len(st.Refused) == 3*n
	})
	if len(rb.samples) != 0 || len(rb.tickList()) != 0 {
		t.Errorf("the blind one made %d samples and %d ticks of values that it cannot name", len(rb.samples), len(rb.ticks))
	}
	eventually(t, "the other one goes on, unconfirmed", func() bool {
		got := rw.of(0, collector.RolePV)
		return len(got) > 2 && got[0].Unconfirmed && len(rw.tickList()) > 0
	})
	f.tell("realias")
	eventually(t, "both know the names after the birth", func() bool {
		b, w := rb.of(0, collector.RolePV), rw.of(0, collector.RolePV)
		return len(b) > 2 && !b[len(b)-1].Unconfirmed && !w[len(w)-1].Unconfirmed
	})
	f.tell("end")
	_, tr := f.end()
	name, _ := feedLoop(0)
	rows := map[int64]truthRow{}
	for _, x := range tr[name] {
		rows[x.time] = x
	}
	for _, r := range []*recorder{rb, rw} {
		for _, x := range r.of(0, collector.RolePV) {
			if row, ok := rows[x.Time]; ok && row.pv != x.Value {
				t.Errorf("PV %v, published %v", x.Value, row.pv)
			}
		}
	}
}
