package detect

import (
	"encoding/binary"
	"testing"
)

func TestSizes(t *testing.T) {
	var s state
	for _, x := range []struct {
		n string
		v any
	}{{"state", s}, {"grid", s.Grid}, {"motion", s.Motion}, {"noise", s.Noise}, {"casc", s.Casc}, {"cycles", s.Cycles}, {"fits", s.Fits}, {"track", s.Track}, {"osc", s.Osc}, {"recov", s.Recov}, {"off", s.Off}, {"sat", s.Sat}, {"misc", s.Misc}, {"open", s.Open}, {"claim", s.Claim}, {"profile", profile{}}} {
		t.Log(x.n, binary.Size(x.v))
	}
}
