package detect

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
)

// Memories: the state as it stands, little-endian, after a head of engine version
// and time. Written whole, never merged.

// ErrEngine is returned by Load when a memory is of another engine: its profile
// was taken, the rest must be warmed up.
var ErrEngine = errors.New("memory of another engine version")

// ErrMemory is returned by Load when a memory is damaged or not one.
var ErrMemory = errors.New("not a memory")

type memoryHead struct {
	Magic   uint16
	Engine  uint16
	Size    uint32 // of the state, bytes
	Through int64  // ms UTC
}

const memoryMagic = 0x4d77

// profile is what a loop taught over weeks: kept across engines.
type profile struct {
	Noise  noise
	Usual  [2]float32 // s
	UsualN [2]uint32
	Cycles [maxLevels]struct {
		V float32
		N uint32
	}
	Fits [fitBanks]struct {
		K, T   float32
		KN, TN uint32
	}
}

// Save appends the memory of the loop: profile and transient state, at most
// 4 KiB, stamped with engine version and Through.
func (w *Watch) Save(dst []byte) []byte {
	size := binary.Size(&w.s)
	psize := binary.Size(profile{})
	h := memoryHead{memoryMagic, Engine, uint32(size), w.s.Through}
	b := bytes.NewBuffer(dst)
	binary.Write(b, binary.LittleEndian, h)
	binary.Write(b, binary.LittleEndian, uint32(psize))
	p := w.profile()
	binary.Write(b, binary.LittleEndian, &p)
	binary.Write(b, binary.LittleEndian, &w.s)
	return b.Bytes()
}

func (w *Watch) profile() (p profile) {
	p.Noise = w.s.Noise
	for i, q := range w.s.Recov.Usual {
		p.Usual[i], p.UsualN[i] = q.V, q.N
	}
	for i := range w.s.Cycles {
		p.Cycles[i].V, p.Cycles[i].N = w.s.Cycles[i].Usual.V, w.s.Cycles[i].Usual.N
	}
	for i := range w.s.Fits {
		b := &w.s.Fits[i]
		p.Fits[i].K, p.Fits[i].KN, p.Fits[i].T, p.Fits[i].TN = b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N
	}
	return p
}

// MemoryThrough reads the time stamp of a memory, ms UTC.
func MemoryThrough(b []byte) (int64, error) {
	var h memoryHead
	if _, err := binary.Decode(b, binary.LittleEndian, &h); err != nil || h.Magic != memoryMagic {
		return 0, ErrMemory
	}
	return h.Through, nil
}

// Load restores a memory. ErrEngine is returned when it is of another engine:
// then only the profile was taken. ErrMemory means that nothing was.
func (w *Watch) Load(b []byte) error {
	var h memoryHead
	n, err := binary.Decode(b, binary.LittleEndian, &h)
	if err != nil || h.Magic != memoryMagic {
		return ErrMemory
	}
	b = b[n:]
	var psize uint32
	if n, err = binary.Decode(b, binary.LittleEndian, &psize); err != nil {
		return ErrMemory
	}
	b = b[n:]
	if int(psize) > len(b) {
		return ErrMemory
	}
	if h.Engine != Engine {
		var p profile
		if int(psize) != binary.Size(p) {
			return fmt.Errorf("%w: engine %d, this is %d; its profile has another form", ErrEngine, h.Engine, Engine)
		}
		if _, err := binary.Decode(b[:psize], binary.LittleEndian, &p); err != nil {
			return ErrMemory
		}
		w.takeProfile(&p)
		return fmt.Errorf("%w: engine %d, this is %d", ErrEngine, h.Engine, Engine)
	}
	b = b[psize:]
	var s state
	if int(h.Size) != binary.Size(&s) || len(b) < int(h.Size) {
		return ErrMemory
	}
	if _, err := binary.Decode(b, binary.LittleEndian, &s); err != nil {
		return ErrMemory
	}
	w.s = s
	return nil
}

func (w *Watch) takeProfile(p *profile) {
	w.s = state{}
	w.s.Noise = p.Noise
	for i := range p.Usual {
		w.s.Recov.Usual[i].V, w.s.Recov.Usual[i].N = p.Usual[i], p.UsualN[i]
	}
	for i := range p.Cycles {
		w.s.Cycles[i].Usual.V, w.s.Cycles[i].Usual.N = p.Cycles[i].V, p.Cycles[i].N
	}
	for i := range p.Fits {
		b := &w.s.Fits[i]
		b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N = p.Fits[i].K, p.Fits[i].KN, p.Fits[i].T, p.Fits[i].TN
	}
}
