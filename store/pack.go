package store

import (
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
)

// formatVersion is the first byte of everything this package writes.
const formatVersion = 1

// Kinds of packs, second byte of each.
const (
	kindTail   = 't' // frames since the flush before, by flush
	kindChunk  = 'c' // frames of one chunk interval, re-encoded from the tail
	kindFill   = 'f' // frames read from history
	kindMemory = 'm' // memories of detection
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

var (
	errPack    = errors.New("pack is damaged")
	errVersion = errors.New("written by another version of midwatch; hint: start the version that wrote it, or move the file out of the data folder")
)

// packEntry is one loop's part of a pack. ord says where in the slice the loop
// is kept (see slice.ord). Low and high are the times of the first and last
// frame; of a memory, low is what it was stamped with; of a tail they are 0.
type packEntry struct {
	ord       uint32
	low, high int64
	crc       uint32
	blob      []byte // not verified yet; see packEntry.ok
}

// ok verifies the blob of an entry that carries its own checksum.
func (e *packEntry) ok() bool { return crc32.Checksum(e.blob, castagnoli) == e.crc }

// pack gathers entries with ascending ord until it is big enough for one value.
type pack struct {
	kind  byte
	base  int64 // tails: time that pieces are relative to
	first uint32
	last  uint32
	n     int
	table []byte
	blobs []byte
}

func (p *pack) reset() { p.n, p.table, p.blobs = 0, p.table[:0], p.blobs[:0] }

// add takes the entry whose blob was just appended to p.blobs from offset on.
func (p *pack) add(ord uint32, from int, low, high int64) {
	if p.n == 0 {
		p.first, p.last = ord, ord
	}
	p.table = binary.AppendUvarint(p.table, uint64(ord-p.last))
	p.table = binary.AppendUvarint(p.table, uint64(len(p.blobs)-from))
	if p.kind != kindTail {
		p.table = binary.AppendVarint(p.table, low)
		p.table = binary.AppendUvarint(p.table, uint64(high-low))
		p.table = binary.LittleEndian.AppendUint32(p.table, crc32.Checksum(p.blobs[from:], castagnoli))
	}
	p.last = ord
	p.n++
}

// value is the pack as stored under key(n, p.first) and the key itself.
func (p *pack) value(n uint32) (key, value []byte) {
	key = binary.BigEndian.AppendUint32(nil, p.first)
	b := make([]byte, 0, len(p.table)+len(p.blobs)+24)
	b = append(b, formatVersion, p.kind)
	b = binary.AppendVarint(b, p.base)
	b = binary.AppendUvarint(b, uint64(p.n))
	b = binary.AppendUvarint(b, uint64(len(p.table)))
	b = append(b, p.table...)
	b = binary.LittleEndian.AppendUint32(b, packSum(n, p.first, b))
	b = append(b, p.blobs...)
	if p.kind == kindTail {
		b = binary.LittleEndian.AppendUint32(b, crc32.Checksum(p.blobs, castagnoli))
	}
	return key, b
}

// packSum covers the place of a pack, too, so that a stale or misplaced page is
// noticed.
func packSum(n, first uint32, head []byte) uint32 {
	var k [8]byte
	binary.BigEndian.PutUint32(k[:], n)
	binary.BigEndian.PutUint32(k[4:], first)
	return crc32.Update(crc32.Checksum(k[:], castagnoli), castagnoli, head)
}

// readPack walks a stored pack. The table is verified before the first entry is
// given; blobs are verified here for tails and by packEntry.ok for the others.
// yield returns false to end the walk.
func readPack(n, first uint32, v []byte, yield func(packEntry) bool) (base int64, err error) {
	if len(v) < 2 {
		return 0, errPack
	}
	if v[0] != formatVersion {
		return 0, fmt.Errorf("pack of format %d: %w", v[0], errVersion)
	}
	kind, at := v[1], 2
	base, k := binary.Varint(v[at:])
	if k <= 0 {
		return 0, errPack
	}
	at += k
	count, k := binary.Uvarint(v[at:])
	if k <= 0 {
		return 0, errPack
	}
	at += k
	size, k := binary.Uvarint(v[at:])
	if at += k; k <= 0 || size > uint64(len(v)-at) || len(v)-at-int(size) < 4 {
		return 0, errPack
	}
	table := v[at : at+int(size)]
	at += int(size)
	if binary.LittleEndian.Uint32(v[at:]) != packSum(n, first, v[:at]) {
		return 0, errPack
	}
	blobs := v[at+4:]
	if kind == kindTail {
		if len(blobs) < 4 {
			return 0, errPack
		}
		body := len(blobs) - 4
		if crc32.Checksum(blobs[:body], castagnoli) != binary.LittleEndian.Uint32(blobs[body:]) {
			return 0, errPack
		}
		blobs = blobs[:body]
	}
	e := packEntry{ord: first}
	for range count {
		d, k := binary.Uvarint(table)
		if k <= 0 {
			return 0, errPack
		}
		table = table[k:]
		l, k := binary.Uvarint(table)
		if k <= 0 || l > uint64(len(blobs)) {
			return 0, errPack
		}
		table = table[k:]
		e.ord += uint32(d)
		e.blob, blobs = blobs[:l:l], blobs[l:]
		if kind != kindTail {
			low, k := binary.Varint(table)
			if k <= 0 {
				return 0, errPack
			}
			table = table[k:]
			span, k := binary.Uvarint(table)
			if k <= 0 || len(table)-k < 4 {
				return 0, errPack
			}
			e.low, e.high = low, low+int64(span)
			e.crc = binary.LittleEndian.Uint32(table[k:])
			table = table[k+4:]
		}
		if !yield(e) {
			break
		}
	}
	return base, nil
}
