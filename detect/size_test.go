package detect

import (
	"testing"
	"unsafe"
)

// The design allows 8 KiB a loop all in, 4 KiB of it a memory.
func TestWatchIsSmall(t *testing.T) {
	if n := unsafe.Sizeof(Watch{}); n > 7340 {
		t.Errorf("a watch takes %d bytes", n)
	}
	w := New(calmLoop(), 0, Options{})
	most := 0
	f := healthyFrames(50000)
	for i := range f {
		w.Step(&f[i], func(*Finding) {})
		if i > 5000 && i%1009 == 0 {
			most = max(most, len(w.Save(nil)))
		}
	}
	if most > 4096 {
		t.Errorf("a memory took %d bytes", most)
	}
	t.Logf("watch %d bytes, memory %d bytes", unsafe.Sizeof(Watch{}), most)
}
