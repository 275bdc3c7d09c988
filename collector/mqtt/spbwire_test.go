package mqtt

import (
	"bytes"
	"math"
	"testing"

	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/reflect/protodesc"
	"google.golang.org/protobuf/reflect/protoreflect"
	"google.golang.org/protobuf/types/descriptorpb"
	"google.golang.org/protobuf/types/dynamicpb"
)

// reference is the part of the payload schema that is read, as a descriptor for
// the protobuf library: field numbers and types as published.
func reference(t testing.TB) protoreflect.MessageDescriptor {
	type ft = descriptorpb.FieldDescriptorProto_Type
	const (
		u64 = descriptorpb.FieldDescriptorProto_TYPE_UINT64
		u32 = descriptorpb.FieldDescriptorProto_TYPE_UINT32
		b   = descriptorpb.FieldDescriptorProto_TYPE_BOOL
		str = descriptorpb.FieldDescriptorProto_TYPE_STRING
		byt = descriptorpb.FieldDescriptorProto_TYPE_BYTES
		f32 = descriptorpb.FieldDescriptorProto_TYPE_FLOAT
		f64 = descriptorpb.FieldDescriptorProto_TYPE_DOUBLE
		msg = descriptorpb.FieldDescriptorProto_TYPE_MESSAGE
	)
	field := func(name string, n int32, typ ft, of string, repeated, oneof bool) *descriptorpb.FieldDescriptorProto {
		f := &descriptorpb.FieldDescriptorProto{Name: &name, Number: &n, Type: &typ, Label: descriptorpb.FieldDescriptorProto_LABEL_OPTIONAL.Enum()}
		if repeated {
			f.Label = descriptorpb.FieldDescriptorProto_LABEL_REPEATED.Enum()
		}
		if of != "" {
			of = ".k." + of
			f.TypeName = &of
		}
		if oneof {
			f.OneofIndex = proto.Int32(0)
		}
		return f
	}
	one := []*descriptorpb.OneofDescriptorProto{{Name: proto.String("value")}}
	file := &descriptorpb.FileDescriptorProto{Name: proto.String("k.proto"), Package: proto.String("k"), Syntax: proto.String("proto2"),
		MessageType: []*descriptorpb.DescriptorProto{
			{Name: proto.String("Payload"), Field: []*descriptorpb.FieldDescriptorProto{
				field("timestamp", 1, u64, "", false, false), field("metrics", 2, msg, "Metric", true, false), field("seq", 3, u64, "", false, false)}},
			{Name: proto.String("Metric"), OneofDecl: one, Field: []*descriptorpb.FieldDescriptorProto{
				field("name", 1, str, "", false, false), field("alias", 2, u64, "", false, false), field("timestamp", 3, u64, "", false, false),
				field("datatype", 4, u32, "", false, false), field("is_historical", 5, b, "", false, false), field("is_null", 7, b, "", false, false),
				field("properties", 9, byt, "", false, false),
				field("int_value", 10, u32, "", false, true), field("long_value", 11, u64, "", false, true), field("float_value", 12, f32, "", false, true),
				field("double_value", 13, f64, "", false, true), field("boolean_value", 14, b, "", false, true), field("string_value", 15, str, "", false, true),
				field("bytes_value", 16, byt, "", false, true), field("dataset_value", 17, byt, "", false, true), field("template_value", 18, byt, "", false, true),
				field("extension_value", 19, byt, "", false, true)}},
			{Name: proto.String("PropertySet"), Field: []*descriptorpb.FieldDescriptorProto{
				field("keys", 1, str, "", true, false), field("values", 2, msg, "PropertyValue", true, false)}},
			{Name: proto.String("PropertyValue"), OneofDecl: one, Field: []*descriptorpb.FieldDescriptorProto{
				field("type", 1, u32, "", false, false), field("is_null", 2, b, "", false, false),
				field("int_value", 3, u32, "", false, true), field("long_value", 4, u64, "", false, true), field("float_value", 5, f32, "", false, true),
				field("double_value", 6, f64, "", false, true), field("string_value", 8, str, "", false, true)}},
		}}
	fd, err := protodesc.NewFile(file, nil)
	if err != nil {
		t.Fatal(err)
	}
	return fd.Messages().ByName("Payload")
}

// FuzzSparkplug holds the hand walk against the protobuf library: it takes what
// the library takes, reads the same, and never panics.
func FuzzSparkplug(f *testing.F) {
	props := spb{}.text(1, "Quality").bytes(2, spb{}.varint(1, 3).varint(3, 192))
	f.Add(spbMessage(noon, 1, bdSeq(3)))
	f.Add(spbMessage(noon, -1, named("a").varint(2, 1).at(noon).varint(4, 10).double(13, 1.5).bytes(9, props), byAlias(7).float(12, 2).varint(5, 1).varint(7, 1)))
	f.Add(spbMessage(noon, 255, named("t").bytes(18, spb{}.bytes(2, named("m").varint(10, 4_294_967_289))), byAlias(1).text(15, "auto"), byAlias(2).varint(14, 1).varint(11, 5)))
	f.Add([]byte{0x12, 0xff, 0x01})
	f.Add([]byte{0x0b, 0x0c, 0x12, 0x00})
	payloadDesc := reference(f)
	metricDesc := payloadDesc.Fields().ByName("metrics").Message()
	setDesc := payloadDesc.ParentFile().Messages().ByName("PropertySet")
	var p payload
	f.Fuzz(func(t *testing.T, b []byte) {
		err := p.read(b)
		ref := dynamicpb.NewMessage(payloadDesc)
		refErr := proto.Unmarshal(b, ref)
		if err == nil && refErr == nil {
			get := func(m protoreflect.Message, name string) (protoreflect.Value, bool) {
				fd := m.Descriptor().Fields().ByName(protoreflect.Name(name))
				return m.Get(fd), m.Has(fd)
			}
			at, has := get(ref, "timestamp")
			if has != p.hasTime || at.Uint() != p.time {
				t.Fatalf("time %d, library %d", p.time, at.Uint())
			}
			seq, has := get(ref, "seq")
			if has != p.hasSeq || seq.Uint() != p.seq {
				t.Fatalf("seq %d, library %d", p.seq, seq.Uint())
			}
			list, _ := get(ref, "metrics")
			if list.List().Len() != len(p.metrics) {
				t.Fatalf("%d metrics, library %d", len(p.metrics), list.List().Len())
			}
			for i := range p.metrics {
				m, x := &p.metrics[i], list.List().Get(i).Message()
				name, _ := get(x, "name")
				alias, hasAlias := get(x, "alias")
				ts, hasTime := get(x, "timestamp")
				dt, _ := get(x, "datatype")
				hist, _ := get(x, "is_historical")
				null, _ := get(x, "is_null")
				ps, _ := get(x, "properties")
				if name.String() != string(m.name) || alias.Uint() != m.alias || hasAlias != m.hasAlias || ts.Uint() != m.time || hasTime != m.hasTime ||
					uint32(dt.Uint()) != m.datatype || hist.Bool() != m.historical || null.Bool() != m.null || !bytes.Equal(ps.Bytes(), m.props) {
					t.Fatalf("metric %d: %+v, library %v", i, m, x)
				}
				kind := valueKind(0)
				if fd := x.WhichOneof(metricDesc.Oneofs().Get(0)); fd != nil {
					kind = valueKind(fd.Number())
					v := x.Get(fd)
					same := true
					switch kind {
					case kindInt, kindLong:
						same = v.Uint() == m.bits
					case kindFloat:
						same = math.Float32bits(float32(v.Float())) == uint32(m.bits) || v.Float() != v.Float()
					case kindDouble:
						same = math.Float64bits(v.Float()) == m.bits
					case kindBool:
						same = v.Bool() == (m.bits != 0)
					case kindString:
						same = v.String() == string(m.text)
					default:
						same = bytes.Equal(v.Bytes(), m.text)
					}
					if !same {
						t.Fatalf("metric %d: value %d %q of kind %d, library %v", i, m.bits, m.text, kind, v)
					}
				}
				if kind != m.kind {
					t.Fatalf("metric %d: kind %d, library %d", i, m.kind, kind)
				}
				set := dynamicpb.NewMessage(setDesc)
				v, _, ok := property(m.props, "Quality")
				if proto.Unmarshal(m.props, set) == nil {
					compareProperty(t, set, v, ok)
				}
			}
		}
		if err != nil && refErr == nil {
			t.Fatalf("the library takes what the walk refuses")
		}
		// The whole decoder may not panic either, whatever comes.
		feeder := feedInto(fuzzSource)
		feeder.send(noon, db, b, false)
		feeder.send(noon, dd, b, false)
		feeder.send(noon, nb, b, false)
		feeder.send(noon, nd, b, false)
	})
}

func compareProperty(t *testing.T, set *dynamicpb.Message, v float64, ok bool) {
	fields := set.Descriptor().Fields()
	keys, values := set.Get(fields.ByName("keys")).List(), set.Get(fields.ByName("values")).List()
	index := -1
	for i := range keys.Len() {
		if keys.Get(i).String() == "Quality" {
			index = i
		}
	}
	if index < 0 || index >= values.Len() {
		if ok {
			t.Fatal("a property that the library does not see")
		}
		return
	}
	x := values.Get(index).Message()
	fd := x.WhichOneof(x.Descriptor().Oneofs().Get(0))
	null := x.Get(x.Descriptor().Fields().ByName("is_null")).Bool()
	if ok != (fd != nil && !null) {
		t.Fatalf("property there: %v, library %v", ok, fd)
	}
	if ok && fd.Name() == "double_value" && !sameFloat(v, x.Get(fd).Float()) {
		t.Fatalf("property %v, library %v", v, x.Get(fd).Float())
	}
}

var fuzzSource = func() *source {
	cfg := plainConfig
	cfg.Payload = "sparkplug"
	s, err := newSource(cfg, "gateway", "Kestrel Fen", 0, spbBindings, Options{})
	if err != nil {
		panic(err)
	}
	return s
}()
