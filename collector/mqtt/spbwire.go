package mqtt

import (
	"errors"
	"math"

	"google.golang.org/protobuf/encoding/protowire"
)

// Sparkplug B payloads are read by hand over the protobuf wire format, with the
// field numbers of the published schema: a message of three metrics costs a
// fifth of what generated code needs, and nothing is kept of it.

// valueKind is the member of the oneof that holds a metric's value; the numbers
// are the field numbers.
type valueKind uint8

const (
	kindNone     valueKind = 0
	kindInt      valueKind = 10
	kindLong     valueKind = 11
	kindFloat    valueKind = 12
	kindDouble   valueKind = 13
	kindBool     valueKind = 14
	kindString   valueKind = 15
	kindBytes    valueKind = 16
	kindDataSet  valueKind = 17
	kindTemplate valueKind = 18
)

// Data types of metrics (section 6.4.16 of the specification).
const (
	spbInt8     = 1
	spbInt16    = 2
	spbInt32    = 3
	spbInt64    = 4
	spbUInt8    = 5
	spbUInt16   = 6
	spbUInt32   = 7
	spbUInt64   = 8
	spbFloat    = 9
	spbDouble   = 10
	spbBoolean  = 11
	spbString   = 12
	spbDateTime = 13
	spbText     = 14
	spbUUID     = 15
	spbDataSet  = 16
	spbBytes    = 17
	spbFile     = 18
	spbTemplate = 19
)

// metric is one metric of a payload; its slices point into the payload.
type metric struct {
	name       []byte
	alias      uint64
	time       uint64 // ms
	hasAlias   bool
	hasTime    bool
	historical bool
	null       bool
	datatype   uint32
	kind       valueKind
	bits       uint64 // of a number or boolean
	text       []byte // of a string, or the encoding of a template
	props      []byte // encoding of the property set
}

// payload is one Sparkplug payload, reused from message to message.
type payload struct {
	time    uint64 // ms
	seq     uint64
	hasTime bool
	hasSeq  bool
	metrics []metric
}

var errProto = errors.New("no Sparkplug B payload")

// read parses b; on error the payload must not be used.
func (p *payload) read(b []byte) error {
	*p = payload{metrics: p.metrics[:0]}
	for len(b) > 0 {
		f, n := nextField(b)
		if n < 0 {
			return errProto
		}
		b = b[n:]
		switch {
		case f.num == 1 && f.wire == protowire.VarintType:
			p.time, p.hasTime = f.bits, true
		case f.num == 2 && f.wire == protowire.BytesType:
			p.metrics = append(p.metrics, metric{})
			if err := p.metrics[len(p.metrics)-1].read(f.data); err != nil {
				return err
			}
		case f.num == 3 && f.wire == protowire.VarintType:
			p.seq, p.hasSeq = f.bits, true
		}
	}
	return nil
}

func (m *metric) read(b []byte) error {
	for len(b) > 0 {
		f, n := nextField(b)
		if n < 0 {
			return errProto
		}
		b = b[n:]
		switch f.wire {
		case protowire.VarintType:
			switch f.num {
			case 2:
				m.alias, m.hasAlias = f.bits, true
			case 3:
				m.time, m.hasTime = f.bits, true
			case 4:
				m.datatype = uint32(f.bits)
			case 5:
				m.historical = f.bits != 0
			case 7:
				m.null = f.bits != 0
			case 10:
				m.set(kindInt, uint64(uint32(f.bits)), nil)
			case 11:
				m.set(kindLong, f.bits, nil)
			case 14:
				m.set(kindBool, f.bits, nil)
			}
		case protowire.Fixed32Type:
			if f.num == 12 {
				m.set(kindFloat, f.bits, nil)
			}
		case protowire.Fixed64Type:
			if f.num == 13 {
				m.set(kindDouble, f.bits, nil)
			}
		case protowire.BytesType:
			switch f.num {
			case 1:
				m.name = f.data
			case 9:
				m.props = f.data
			case 15, 16, 17, 18, 19:
				m.set(valueKind(f.num), 0, f.data)
			}
		}
	}
	return nil
}

func (m *metric) set(k valueKind, bits uint64, text []byte) { m.kind, m.bits, m.text = k, bits, text }

// field is one field of a message.
type field struct {
	num  protowire.Number
	wire protowire.Type
	bits uint64
	data []byte
}

// nextField reads one field and returns its length, negative when it is torn.
func nextField(b []byte) (f field, n int) {
	var tag int
	if f.num, f.wire, tag = protowire.ConsumeTag(b); tag < 0 {
		return f, tag
	}
	b = b[tag:]
	switch f.wire {
	case protowire.VarintType:
		f.bits, n = protowire.ConsumeVarint(b)
	case protowire.Fixed32Type:
		var v uint32
		v, n = protowire.ConsumeFixed32(b)
		f.bits = uint64(v)
	case protowire.Fixed64Type:
		f.bits, n = protowire.ConsumeFixed64(b)
	case protowire.BytesType:
		f.data, n = protowire.ConsumeBytes(b)
	default:
		n = protowire.ConsumeFieldValue(f.num, f.wire, b)
	}
	if n < 0 {
		return f, n
	}
	return f, tag + n
}

// number is the numeric value, its sign by the data type of the birth: negative
// integers travel as two's complement of 32 or of 64 bits.
func (m *metric) number(datatype uint32) (float64, bool) {
	switch m.kind {
	case kindFloat:
		return float64(math.Float32frombits(uint32(m.bits))), true
	case kindDouble:
		return math.Float64frombits(m.bits), true
	case kindInt, kindLong:
		switch datatype {
		case spbInt8:
			return float64(int8(m.bits)), true
		case spbInt16:
			return float64(int16(m.bits)), true
		case spbInt32:
			return float64(int32(m.bits)), true
		case spbInt64:
			return float64(int64(m.bits)), true
		}
		return float64(m.bits), true
	}
	return math.NaN(), false
}

// fits says whether the kind of the value can belong to the data type.
func (m *metric) fits(datatype uint32) bool {
	if m.null || m.kind == kindNone {
		return true
	}
	switch datatype {
	case spbInt8, spbInt16, spbInt32, spbInt64, spbUInt8, spbUInt16, spbUInt32, spbUInt64, spbDateTime:
		return m.kind == kindInt || m.kind == kindLong
	case spbFloat, spbDouble:
		return m.kind == kindFloat || m.kind == kindDouble
	case spbBoolean:
		return m.kind == kindBool
	case spbString, spbText, spbUUID:
		return m.kind == kindString
	case spbDataSet:
		return m.kind == kindDataSet
	case spbBytes, spbFile:
		return m.kind == kindBytes
	case spbTemplate:
		return m.kind == kindTemplate
	}
	return true
}

// property finds a property by name and returns its number or text; ok is false
// where there is none or it is null.
func property(props []byte, name string) (v float64, text []byte, ok bool) {
	index, at := -1, 0
	for b := props; len(b) > 0; {
		f, n := nextField(b)
		if n < 0 {
			return 0, nil, false
		}
		b = b[n:]
		if f.num == 1 && f.wire == protowire.BytesType {
			if string(f.data) == name {
				index = at
			}
			at++
		}
	}
	for b := props; len(b) > 0 && index >= 0; {
		f, n := nextField(b)
		if n < 0 {
			return 0, nil, false
		}
		b = b[n:]
		if f.num != 2 || f.wire != protowire.BytesType {
			continue
		}
		if index--; index < 0 {
			return propertyValue(f.data)
		}
	}
	return 0, nil, false
}

// propertyValue reads a PropertyValue; its oneof is numbered like the metric's,
// seven lower.
func propertyValue(b []byte) (v float64, text []byte, ok bool) {
	var m metric
	for len(b) > 0 {
		f, n := nextField(b)
		if n < 0 {
			return 0, nil, false
		}
		b = b[n:]
		switch {
		case f.num == 1 && f.wire == protowire.VarintType:
			m.datatype = uint32(f.bits)
		case f.num == 2 && f.wire == protowire.VarintType:
			m.null = f.bits != 0
		case f.num == 3 && f.wire == protowire.VarintType:
			m.set(kindInt, uint64(uint32(f.bits)), nil)
		case f.num == 4 && f.wire == protowire.VarintType:
			m.set(kindLong, f.bits, nil)
		case f.num == 5 && f.wire == protowire.Fixed32Type:
			m.set(kindFloat, f.bits, nil)
		case f.num == 6 && f.wire == protowire.Fixed64Type:
			m.set(kindDouble, f.bits, nil)
		case f.num == 8 && f.wire == protowire.BytesType:
			m.set(kindString, 0, f.data)
		}
	}
	if m.null || m.kind == kindNone {
		return math.NaN(), nil, false
	}
	v, _ = m.number(m.datatype)
	return v, m.text, true
}
