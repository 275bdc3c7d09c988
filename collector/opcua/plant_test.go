package opcua

import (
	"slices"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/collector/plant"
	"midwatch/configs"
)

// TestAgainstPlant watches the simulated plant, whose server is the library's
// own: another implementation with other gaps (it cannot translate paths).
func TestAgainstPlant(t *testing.T) {
	t.Parallel()
	srv, err := plant.Serve(t.Context(), plant.NewAt(1, time.Now()), plant.ServeOptions{})
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if n := srv.Writes(); n != 0 {
			t.Errorf("the plant counted %d writes", n)
		}
		if err := srv.Close(); err != nil {
			t.Error(err)
		}
	}()
	var bindings []collector.Binding
	list := plant.LoopList(plant.Sources{OPCUA: "works"})
	list = slices.DeleteFunc(list, func(l *configs.Loop) bool { return l.Source != "works" })
	for i, l := range list {
		modes, err := collector.ParseModeMap(l.ModeMap)
		if err != nil {
			t.Fatal(err)
		}
		for role, address := range map[collector.Role]string{collector.RolePV: l.PV, collector.RoleSP: l.SP, collector.RoleOP: l.OP, collector.RoleMode: l.ModeTag} {
			b := collector.Binding{Loop: collector.LoopID(i), Name: l.Name, Role: role, Address: address, Sample: 1000}
			if role == collector.RoleMode {
				b.Modes = modes
			}
			bindings = append(bindings, b)
		}
	}
	w := run(t, plainConfig(srv.Endpoint()), bindings, nil)
	eventually(t, "PVs, modes and ticks of all loops", func() bool {
		for i := range list {
			if len(w.in.of(collector.LoopID(i), collector.RolePV)) < 3 || len(w.in.of(collector.LoopID(i), collector.RoleMode)) == 0 {
				return false
			}
		}
		return w.in.lastTick().Through > 0
	})
	if st := w.State(); len(st.Refused) != 0 {
		t.Errorf("refused: %v", st.Refused)
	}
	found, err := w.Survey(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if len(found) != len(list) {
		t.Errorf("survey found %d loops, the plant has %d here", len(found), len(list))
	}
	for _, f := range found {
		at := slices.IndexFunc(list, func(l *configs.Loop) bool { return l.PV == f.PV })
		if at < 0 {
			t.Errorf("survey found %s with PV %s, which the plant's list does not have", f.Name, f.PV)
			continue
		}
		if l := list[at]; f.SP != l.SP || f.OP != l.OP || f.ModeTag != l.ModeTag || f.PVLow != l.PVLow || f.PVHigh != l.PVHigh {
			t.Errorf("survey drafted %+v, the plant's list has %+v", f, l)
		}
	}
	w.stop()
}
