package plant

import (
	"bytes"
	"math"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"midwatch/configs"
)

// TestLoopListReadsBack: written as CSV and read again it is the same list, and
// so it has no mistake that a person's list would be refused for.
func TestLoopListReadsBack(t *testing.T) {
	for _, n := range []int{0, 1, 14, len(works)} {
		want := LoopList(Sources{OPCUA: "works", MQTT: "gateway", OPCUALoops: n})
		var b bytes.Buffer
		if err := configs.WriteLoopList(&b, want); err != nil {
			t.Fatal(err)
		}
		got, err := configs.ReadLoopList(&b, "loops.csv")
		if err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(want, got, cmpopts.IgnoreFields(configs.Loop{}, "Where"), cmpopts.EquateNaNs()); d != "" {
			t.Errorf("%d loops over OPC UA: written and read again (-want +got):\n%s", n, d)
		}
	}
}

// TestLoopListIsTrue: the list says of every loop what the works does.
func TestLoopListIsTrue(t *testing.T) {
	p := New(1)
	for i, l := range LoopList(Sources{OPCUA: "works", MQTT: "gateway"}) {
		r := p.loops[i]
		if l.Name != r.name || l.Gain != r.ctrl.Kc || l.Sign() != r.ctrl.Sign {
			t.Errorf("%s: gain %g sign %g, the controller has %g and %g", l.Name, l.Gain, l.Sign(), r.ctrl.Kc, r.ctrl.Sign)
		}
		if reset := l.ResetS; l.PropOnly != (r.ctrl.Ti == 0) || !l.PropOnly && reset != r.ctrl.Ti {
			t.Errorf("%s: reset %g s, P-only %v, the controller has %g", l.Name, reset, l.PropOnly, r.ctrl.Ti)
		}
		if l.Action == configs.ActionUnknown || l.Process == configs.ProcessUnknown || l.Unit == "" || l.Service == "" || l.Area == "" || l.Element == "" {
			t.Errorf("%s: something is not filled in: %+v", l.Name, l)
		}
		if math.IsNaN(l.GainPct) || l.PVSpan() <= 0 {
			t.Errorf("%s: gain %g %%/%%, span %g", l.Name, l.GainPct, l.PVSpan())
		}
		if sp := r.spec.sp; sp <= l.PVLow || sp >= l.PVHigh {
			t.Errorf("%s: set point %g outside %g to %g", l.Name, sp, l.PVLow, l.PVHigh)
		}
	}
}
