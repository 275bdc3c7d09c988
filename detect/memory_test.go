package detect_test

import (
	"bytes"
	"encoding/binary"
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/detect"
)

// A damaged memory is refused whole: every cut and every changed byte gives
// ErrMemory and leaves the watch as it was.
func TestDamagedMemory(t *testing.T) {
	x := fixtures()[0]
	w, _ := watchOver(x.loop, x.frames[:9000])
	good := w.Save(nil)
	other, _ := watchOver(x.loop, x.frames[:3000])
	before := other.Save(nil)
	try := func(name string, b []byte) {
		t.Helper()
		err := other.Load(b)
		if !errors.Is(err, detect.ErrMemory) && !errors.Is(err, detect.ErrEngine) {
			t.Fatalf("%s: Load says %v", name, err)
		}
		if errors.Is(err, detect.ErrMemory) && !bytes.Equal(other.Save(nil), before) {
			t.Fatalf("%s: the watch was changed", name)
		}
		if errors.Is(err, detect.ErrEngine) { // its engine number is what was damaged
			if err := other.Load(before); err != nil {
				t.Fatal(err)
			}
		}
	}
	try("empty", nil)
	try("a text", []byte("this is no memory at all, only a line of text"))
	for n := range len(good) {
		if n%7 == 0 || n > len(good)-20 {
			try("cut", good[:n])
		}
	}
	for i := range good {
		b := bytes.Clone(good)
		b[i] ^= 1 << (i % 8)
		try("a changed bit", b)
	}
	rnd := rand.New(rand.NewPCG(2, 2))
	for range 200 {
		b := bytes.Clone(good)
		for range 1 + rnd.IntN(8) {
			b[rnd.IntN(len(b))] = byte(rnd.Uint32())
		}
		if !bytes.Equal(b, good) {
			try("changed bytes", b)
		}
	}
	if err := other.Load(good); err != nil || !bytes.Equal(other.Save(nil), good) {
		t.Errorf("the sound memory: %v", err)
	}
}

func TestMemoryThroughOfNoMemory(t *testing.T) {
	for _, b := range [][]byte{nil, {1}, []byte("0123456789012345678901234567890")} {
		if _, err := detect.MemoryThrough(b); !errors.Is(err, detect.ErrMemory) {
			t.Errorf("%q: %v", b, err)
		}
	}
}

// Of another engine only the profile is taken: noise level, usual times and
// tuning are known at once, nothing is open, and time begins anew.
func TestMemoryOfAnotherEngine(t *testing.T) {
	x := fixtures()[0]
	w, _ := watchOver(x.loop, x.frames)
	if len(restated(w)) == 0 {
		t.Fatal("the fixture holds nothing open")
	}
	noise := w.View().NoisePV
	b := w.Save(nil)
	// The head is magic, engine (two bytes each, little-endian), then the rest.
	if binary.LittleEndian.Uint16(b[2:]) != detect.Engine {
		t.Fatalf("the engine is not in bytes 2 and 3 of the head: % x", b[:8])
	}
	binary.LittleEndian.PutUint16(b[2:], detect.Engine+1)
	n := detect.New(x.loop, 0, detect.Options{})
	if err := n.Load(b); !errors.Is(err, detect.ErrEngine) || errors.Is(err, detect.ErrMemory) {
		t.Fatalf("Load says %v", err)
	}
	if n.Through() != 0 || len(restated(n)) != 0 {
		t.Errorf("through %d, %d open: more than the profile was taken", n.Through(), len(restated(n)))
	}
	fresh := detect.New(x.loop, 0, detect.Options{})
	for i := range 40 { // far fewer frames than a noise level takes
		n.Warm(&x.frames[i])
		fresh.Warm(&x.frames[i])
	}
	if v := n.View().NoisePV; !(math.Abs(v/noise-1) < 0.2) {
		t.Errorf("noise %.3g after the profile was taken, was %.3g", v, noise)
	}
	if v := fresh.View().NoisePV; v == v {
		t.Errorf("a fresh watch knows its noise after 40 frames: %.3g; the test proves nothing", v)
	}
	// Warm goes through the window again, then the same trouble is known, unsaid.
	for i := range x.frames {
		n.Warm(&x.frames[i])
	}
	if fs := restated(n); len(fs) == 0 || fs[0].Kind != x.kind {
		t.Errorf("after the warm-up:%s", brief(fs))
	}
}
