package detect

import (
	"bytes"
	"compress/flate"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"sync"
)

// Memories: the state as it stands, little-endian and deflated, after a head of
// engine version and time. Written whole, never merged.

// ErrEngine is returned by Load when a memory is of another engine: its profile
// was taken, the rest must be warmed up.
var ErrEngine = errors.New("memory of another engine version")

// ErrMemory is returned by Load when a memory is damaged or not one.
var ErrMemory = errors.New("not a memory")

type memoryHead struct {
	Magic   uint16
	Engine  uint16
	Profile uint32 // its size, bytes
	Through int64  // ms UTC
	Sum     uint32 // CRC-32 (Castagnoli) of what follows the head: deflate has none
}

const memoryMagic = 0x4d77

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

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

// deflaters are kept: each holds more than half a megabyte.
var deflaters = sync.Pool{New: func() any {
	z, _ := flate.NewWriter(nil, flate.BestSpeed)
	return z
}}

// Save appends the memory of the loop: profile and transient state, some 3 KiB,
// stamped with engine version and Through.
func (w *Watch) Save(dst []byte) []byte {
	p := w.profile()
	raw := make([]byte, 0, 8<<10)
	raw, _ = binary.Append(raw, binary.LittleEndian, &p)
	h := memoryHead{memoryMagic, Engine, uint32(len(raw)), w.s.Through, 0}
	raw, _ = binary.Append(raw, binary.LittleEndian, &w.s)
	dst, _ = binary.Append(dst, binary.LittleEndian, h)
	body := len(dst)
	b := bytes.NewBuffer(dst)
	z := deflaters.Get().(*flate.Writer)
	z.Reset(b)
	z.Write(raw)
	z.Close()
	deflaters.Put(z)
	dst = b.Bytes()
	binary.LittleEndian.PutUint32(dst[body-4:], crc32.Checksum(dst[body:], castagnoli))
	return dst
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
	if err != nil || h.Magic != memoryMagic || crc32.Checksum(b[n:], castagnoli) != h.Sum {
		return ErrMemory
	}
	raw, err := io.ReadAll(io.LimitReader(flate.NewReader(bytes.NewReader(b[n:])), 64<<10))
	if err != nil || int(h.Profile) > len(raw) {
		return ErrMemory
	}
	if h.Engine != Engine {
		var p profile
		if int(h.Profile) != binary.Size(p) {
			return fmt.Errorf("%w: engine %d, this is %d; its profile has another form", ErrEngine, h.Engine, Engine)
		}
		if _, err := binary.Decode(raw, binary.LittleEndian, &p); err != nil {
			return ErrMemory
		}
		w.takeProfile(&p)
		return fmt.Errorf("%w: engine %d, this is %d", ErrEngine, h.Engine, Engine)
	}
	raw = raw[h.Profile:]
	var s state
	if len(raw) != binary.Size(&s) {
		return ErrMemory
	}
	if _, err := binary.Decode(raw, binary.LittleEndian, &s); err != nil || s.Through != h.Through {
		return ErrMemory
	}
	w.s = s
	w.usual.known = false
	w.in = input{t: s.Grid.At, dt: s.Grid.DT} // Restate and View reckon from the last slot
	return nil
}

func (w *Watch) takeProfile(p *profile) {
	w.s = state{}
	w.usual.known = false
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
