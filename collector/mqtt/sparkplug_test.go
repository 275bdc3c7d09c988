package mqtt

import (
	"context"
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"google.golang.org/protobuf/encoding/protowire"

	"midwatch/collector"
	"midwatch/configs"
)

// spb writes protobuf fields for tests.
type spb []byte

func (b spb) varint(n protowire.Number, v uint64) spb {
	return protowire.AppendVarint(protowire.AppendTag(b, n, protowire.VarintType), v)
}
func (b spb) double(n protowire.Number, v float64) spb {
	return protowire.AppendFixed64(protowire.AppendTag(b, n, protowire.Fixed64Type), math.Float64bits(v))
}
func (b spb) float(n protowire.Number, v float32) spb {
	return protowire.AppendFixed32(protowire.AppendTag(b, n, protowire.Fixed32Type), math.Float32bits(v))
}
func (b spb) bytes(n protowire.Number, v []byte) spb {
	return protowire.AppendBytes(protowire.AppendTag(b, n, protowire.BytesType), v)
}
func (b spb) text(n protowire.Number, v string) spb { return b.bytes(n, []byte(v)) }

// spbMessage is a payload; seq < 0 leaves it out.
func spbMessage(at int64, seq int, metrics ...spb) []byte {
	b := spb{}.varint(1, uint64(at))
	for _, m := range metrics {
		b = b.bytes(2, m)
	}
	if seq >= 0 {
		b = b.varint(3, uint64(seq))
	}
	return b
}

func named(name string) spb   { return spb{}.text(1, name) }
func byAlias(a uint64) spb    { return spb{}.varint(2, a) }
func bdSeq(v uint64) spb      { return named("bdSeq").varint(4, spbInt64).varint(11, v) }
func (b spb) at(ms int64) spb { return b.varint(3, uint64(ms)) }

const (
	nb = "spBv1.0/KestrelFen/NBIRTH/edge-1"
	nd = "spBv1.0/KestrelFen/NDEATH/edge-1"
	db = "spBv1.0/KestrelFen/DBIRTH/edge-1/bay1"
	dd = "spBv1.0/KestrelFen/DDATA/edge-1/bay1"
	dx = "spBv1.0/KestrelFen/DDEATH/edge-1/bay1"
)

func spbSource(t *testing.T, opts Options, b ...collector.Binding) *feeder {
	if len(b) == 0 {
		b = []collector.Binding{bind(1, collector.RolePV, "KestrelFen/edge-1/bay1#LIC-310/PV"), bind(1, collector.RoleOP, "KestrelFen/edge-1/bay1#LIC-310/OP")}
	}
	return feedInto(build(t, configs.MQTT{Payload: "sparkplug"}, opts, b...))
}

func born(f *feeder, at int64, bd uint64, pvAlias uint64) {
	f.send(at, nb, spbMessage(at, 0, bdSeq(bd)), false)
	f.send(at, db, spbMessage(at, 1, named("LIC-310/PV").varint(2, pvAlias).varint(4, spbDouble).double(13, 50),
		named("LIC-310/OP").varint(2, 3-pvAlias).varint(4, spbDouble).double(13, 20)), false)
}

func (f *feeder) last(t *testing.T) collector.Sample {
	t.Helper()
	if len(f.r.samples) == 0 {
		t.Fatal("no sample")
	}
	return f.r.samples[len(f.r.samples)-1]
}

func TestSparkplugValues(t *testing.T) {
	quality := func(v uint64) spb {
		return spb{}.text(1, "Other").text(1, "Quality").bytes(2, spb{}.varint(1, spbInt32).varint(3, 1)).bytes(2, spb{}.varint(1, spbInt32).varint(3, v))
	}
	modes, _ := collector.ParseModeMap("")
	var negative int64 = -7
	cases := []struct {
		name     string
		role     collector.Role
		datatype uint64
		value    spb
		want     float64
		quality  collector.Quality
	}{
		{"double", collector.RolePV, spbDouble, spb{}.double(13, 1.5), 1.5, collector.Good},
		{"float", collector.RolePV, spbFloat, spb{}.float(12, 1.5), 1.5, collector.Good},
		{"int8, 32 bits", collector.RolePV, spbInt8, spb{}.varint(10, uint64(uint32(negative))), -7, collector.Good},
		{"int8, 64 bits", collector.RolePV, spbInt8, spb{}.varint(11, uint64(negative)), -7, collector.Good},
		{"int16, 16 bits", collector.RolePV, spbInt16, spb{}.varint(10, uint64(uint16(negative&0xffff))), -7, collector.Good},
		{"int32", collector.RolePV, spbInt32, spb{}.varint(10, uint64(uint32(negative))), -7, collector.Good},
		{"int32 as long", collector.RolePV, spbInt32, spb{}.varint(11, uint64(uint32(negative))), -7, collector.Good},
		{"int64", collector.RolePV, spbInt64, spb{}.varint(11, uint64(negative)), -7, collector.Good},
		{"uint8", collector.RolePV, spbUInt8, spb{}.varint(10, 200), 200, collector.Good},
		{"uint32 as long", collector.RolePV, spbUInt32, spb{}.varint(11, 4_000_000_000), 4e9, collector.Good},
		{"boolean for a number", collector.RolePV, spbBoolean, spb{}.varint(14, 1), math.NaN(), collector.Bad},
		{"boolean for a condition", collector.RoleCond0, spbBoolean, spb{}.varint(14, 1), 1, collector.Good},
		{"number in a string", collector.RolePV, spbString, spb{}.text(15, "12.5"), 12.5, collector.Good},
		{"mode word", collector.RoleMode, spbString, spb{}.text(15, "Manual"), modes.Code("manual"), collector.Good},
		{"null", collector.RolePV, spbDouble, spb{}.varint(7, 1), math.NaN(), collector.Bad},
		{"NaN", collector.RolePV, spbDouble, spb{}.double(13, math.NaN()), math.NaN(), collector.Bad},
		{"infinite", collector.RolePV, spbDouble, spb{}.double(13, math.Inf(1)), math.NaN(), collector.Bad},
		{"no value", collector.RolePV, spbDouble, spb{}, math.NaN(), collector.Bad},
		{"data set", collector.RolePV, spbDataSet, spb{}.bytes(17, spb{}.varint(1, 1)), math.NaN(), collector.Bad},
		{"quality good", collector.RolePV, spbDouble, spb{}.double(13, 2).bytes(9, quality(192)), 2, collector.Good},
		{"quality bad", collector.RolePV, spbDouble, spb{}.double(13, 2).bytes(9, quality(0)), math.NaN(), collector.Bad},
		{"quality stale", collector.RolePV, spbDouble, spb{}.double(13, 2).bytes(9, quality(500)), 2, collector.Uncertain},
		{"wrong kind for its type", collector.RolePV, spbDouble, spb{}.text(15, "2"), math.NaN(), collector.Bad},
		{"transient", collector.RolePV, spbDouble, spb{}.double(13, 2).varint(6, 1), 2, collector.Good},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			b := bind(1, c.role, "KestrelFen/edge-1/bay1#x")
			b.Modes = modes
			f := spbSource(t, Options{}, b)
			f.send(noon, db, spbMessage(noon, 1, named("x").varint(2, 9).varint(4, c.datatype).varint(7, 1)), false)
			f.send(noon+1000, dd, spbMessage(noon+1000, 2, append(byAlias(9).at(noon+990), c.value...)), false)
			got := f.last(t)
			if len(f.r.samples) != 2 || !sameFloat(got.Value, c.want) || got.Quality != c.quality || got.Time != noon+990 {
				t.Errorf("%d samples, last %+v", len(f.r.samples), got)
			}
		})
	}
}

func TestSparkplugTemplatesAndTimes(t *testing.T) {
	f := spbSource(t, Options{}, bind(1, collector.RolePV, "KestrelFen/edge-1/bay1#LIC-310/Level/Value"), bind(2, collector.RolePV, "KestrelFen/edge-1#Load"))
	member := named("Level").bytes(18, spb{}.bytes(2, named("Value").double(13, 7)).bytes(2, named("Other").double(13, 8)))
	template := spb{}.bytes(2, member)
	f.send(noon, db, spbMessage(noon, 1, named("LIC-310").varint(2, 5).varint(4, spbTemplate).bytes(18, template)), false)
	f.send(noon+1, dd, spbMessage(noon+1, 2, byAlias(5).bytes(18, template)), false)
	if got := f.r.of(1, collector.RolePV); len(got) != 2 || got[1].Value != 7 || got[1].Time != noon+1 {
		t.Errorf("template: %+v", got)
	}
	f.send(noon+2, "spBv1.0/KestrelFen/NDATA/edge-1", spbMessage(noon+1, 3, named("Load").at(noon-5).double(13, 1), named("Load").at(noon-4).double(13, 2)), false)
	if got := f.r.of(2, collector.RolePV); len(got) != 2 || got[0].Time != noon-5 || got[1].Time != noon-4 {
		t.Errorf("several samples of one metric: %+v", got)
	}
}

func TestSparkplugLife(t *testing.T) {
	f := spbSource(t, Options{})
	ends := func() (n int) {
		for _, k := range f.r.ticks {
			if !k.Alive {
				n++
			}
		}
		return n
	}
	f.send(noon, dd, spbMessage(noon, 4, byAlias(1).double(13, 5)), false)
	f.tick()
	if len(f.r.samples) != 0 || len(f.r.ticks) != 0 || f.s.State().Counts["unresolved"] != 1 {
		t.Fatalf("values without names: %+v %+v", f.r.samples, f.r.ticks)
	}
	if st := f.s.State(); !strings.Contains(st.Problem, "waiting for the birth of KestrelFen/edge-1/bay1") {
		t.Errorf("problem %q", st.Problem)
	}
	born(f, noon+10, 3, 1)
	f.send(noon+20, dd, spbMessage(noon+20, 2, byAlias(1).double(13, 5)), false)
	f.tick()
	if got := f.last(t); got.Value != 5 || got.Role != collector.RolePV || got.Unconfirmed || len(f.r.ticks) != 1 {
		t.Fatalf("after birth: %+v, ticks %+v", got, f.r.ticks)
	}
	// A late will of the connection before.
	f.send(noon+30, nd, spbMessage(noon, -1, bdSeq(2)), false)
	if ends() != 0 || f.s.State().Counts["ignored"] != 1 {
		t.Error("an old will was taken")
	}
	// A rebirth is no gap in life, but may swap aliases.
	born(f, noon+40, 3, 2)
	f.send(noon+50, dd, spbMessage(noon+50, 2, byAlias(1).double(13, 22)), false)
	if got := f.last(t); got.Role != collector.RoleOP || got.Value != 22 || ends() != 0 {
		t.Errorf("after a rebirth with other aliases: %+v", got)
	}
	// A gap flags every tag once and keeps the names.
	f.send(noon+60, dd, spbMessage(noon+60, 5, byAlias(1).double(13, 23), byAlias(2).double(13, 51)), false)
	f.send(noon+70, dd, spbMessage(noon+70, 6, byAlias(1).double(13, 24)), false)
	n := len(f.r.samples)
	if !f.r.samples[n-3].Lost || !f.r.samples[n-2].Lost || f.r.samples[n-1].Lost || f.s.State().Counts["seq_gaps"] != 1 {
		t.Errorf("gap: %+v", f.r.samples[n-3:])
	}
	// An unknown alias is the node's mistake while its birth is known.
	f.send(noon+80, dd, spbMessage(noon+80, 7, byAlias(99).double(13, 1), byAlias(1).double(13, 25)), false)
	if got := f.last(t); got.Value != 25 {
		t.Errorf("after an unknown alias: %+v", got)
	}
	f.send(noon+90, dx, spbMessage(noon+90, 8), false)
	if ends() != 1 {
		t.Error("DDEATH")
	}
	f.send(noon+95, dd, spbMessage(noon+95, 9, byAlias(1).double(13, 26)), false)
	if got := f.last(t); got.Value != 25 {
		t.Errorf("a value after death without a birth: %+v", got)
	}
	born(f, noon+100, 3, 1)
	f.send(noon+110, nd, spbMessage(noon, -1, spb{}.varint(2, 12).varint(11, 3)), false) // bdSeq by alias only
	if ends() != 2 {
		t.Error("NDEATH")
	}
	f.send(noon+115, nd, spbMessage(noon, -1, bdSeq(3)), false)
	if ends() != 2 {
		t.Error("a second copy of the death ended the group again")
	}
	if why := f.s.spb.whyMissing(f.s.tags[0]); !strings.Contains(why, "offline") {
		t.Errorf("why %q", why)
	}
	f.send(noon+120, dd, []byte{0x12, 0xff, 0x01}, false)
	if f.s.State().Counts["malformed"] != 1 {
		t.Error("a torn payload was not counted")
	}
}

func TestSparkplugKeptNames(t *testing.T) {
	store := &kept{}
	opts := Options{Births: store}
	write := func(f *feeder) { f.s.spb.births.write() }
	a := spbSource(t, opts)
	born(a, noon, 3, 1)
	a.s.spb.remember(noon)
	write(a)

	restart := func(at int64) *feeder {
		f := spbSource(t, opts)
		f.send(at, dd, spbMessage(at, 9, byAlias(1).double(13, 5)), false)
		return f
	}
	t.Run("soon after", func(t *testing.T) {
		f := restart(noon + 60_000)
		if got := f.last(t); !got.Unconfirmed || got.Value != 5 || got.Role != collector.RolePV {
			t.Errorf("%+v", got)
		}
		// By name nothing is in doubt.
		f.send(noon+61_000, dd, spbMessage(noon+61_000, 10, named("LIC-310/PV").double(13, 6)), false)
		if got := f.last(t); got.Unconfirmed || got.Value != 6 {
			t.Errorf("by name: %+v", got)
		}
	})
	t.Run("long after", func(t *testing.T) {
		if f := restart(noon + absenceMs + 60_000); len(f.r.samples) != 0 || f.s.State().Counts["unresolved"] != 1 {
			t.Errorf("%+v", f.r.samples)
		}
	})
	t.Run("unknown alias drops them", func(t *testing.T) {
		f := restart(noon + 60_000)
		f.send(noon+61_000, dd, spbMessage(noon+61_000, 10, byAlias(77).double(13, 6)), false)
		f.send(noon+62_000, dd, spbMessage(noon+62_000, 11, byAlias(1).double(13, 6)), false)
		if len(f.r.samples) != 1 {
			t.Errorf("%+v", f.r.samples)
		}
	})
	t.Run("a kind that does not fit drops them", func(t *testing.T) {
		f := restart(noon + 60_000)
		f.send(noon+61_000, dd, spbMessage(noon+61_000, 10, byAlias(1).text(15, "auto")), false)
		f.send(noon+62_000, dd, spbMessage(noon+62_000, 11, byAlias(1).double(13, 6)), false)
		if len(f.r.samples) != 1 {
			t.Errorf("%+v", f.r.samples)
		}
	})
	t.Run("a certificate confirms them, without its old values", func(t *testing.T) {
		f := restart(noon + 60_000)
		f.send(noon+61_000, "$sparkplug/certificates/"+db, spbMessage(noon, 1, named("LIC-310/PV").varint(2, 1).varint(4, spbDouble).double(13, 50)), true)
		f.send(noon+62_000, dd, spbMessage(noon+62_000, 10, byAlias(1).double(13, 6)), false)
		if got := f.last(t); got.Unconfirmed || got.Value != 6 || len(f.r.samples) != 2 {
			t.Errorf("%+v", f.r.samples)
		}
	})
	t.Run("a lost connection puts names in doubt", func(t *testing.T) {
		f := spbSource(t, Options{})
		born(f, noon, 3, 1)
		f.s.linkLost(noon + 1000)
		f.send(noon+5000, dd, spbMessage(noon+5000, 40, byAlias(1).double(13, 6)), false)
		if got := f.last(t); !got.Unconfirmed || got.Lost {
			t.Errorf("%+v", got)
		}
		born(f, noon+6000, 3, 1)
		if got := f.last(t); got.Unconfirmed {
			t.Errorf("after the birth: %+v", got)
		}
	})
	t.Run("dropped births put names in doubt", func(t *testing.T) {
		f := spbSource(t, Options{})
		born(f, noon, 3, 1)
		f.s.markLost(map[string]struct{}{db: {}}, false)
		f.send(noon+1000, dd, spbMessage(noon+1000, 2, byAlias(1).double(13, 6)), false)
		if got := f.last(t); !got.Unconfirmed || !got.Lost {
			t.Errorf("%+v", got)
		}
	})
	t.Run("death deletes them", func(t *testing.T) {
		f := restart(noon + 60_000)
		f.send(noon+61_000, nd, spbMessage(noon, -1, bdSeq(3)), false)
		write(f)
		if v, _ := store.Get("birth/gateway/KestrelFen/edge-1/bay1"); v != nil {
			t.Errorf("still kept: %s", v)
		}
	})
	t.Run("a spoilt record is passed over", func(t *testing.T) {
		if err := store.Put("birth/gateway/KestrelFen/edge-1/bay1", []byte("{")); err != nil {
			t.Fatal(err)
		}
		if f := restart(noon + 60_000); len(f.r.samples) != 0 {
			t.Errorf("%+v", f.r.samples)
		}
	})
}

func TestSparkplugBirthSaysRange(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	s := build(t, configs.MQTT{Broker: b.url(), Payload: "sparkplug"}, Options{}, bind(1, collector.RolePV, "KestrelFen/edge-1/bay1#LIC-310/PV"), bind(1, collector.RoleSP, "KestrelFen/edge-1/bay1#LIC-310/SetPoint"))
	props := spb{}.text(1, "engUnit").text(1, "engLow").text(1, "engHigh").
		bytes(2, spb{}.varint(1, spbString).text(8, "m")).bytes(2, spb{}.varint(1, spbDouble).double(6, 0.5)).bytes(2, spb{}.varint(1, spbDouble).double(6, 4.5))
	stop := make(chan struct{})
	stopped := make(chan struct{})
	go func() {
		defer close(stopped)
		for {
			select {
			case <-stop:
				return
			case <-time.After(50 * time.Millisecond):
				now := time.Now().UnixMilli()
				b.srv.Publish(db, spbMessage(now, 1, named("LIC-310/PV").varint(2, 1).varint(4, spbDouble).double(13, 2).bytes(9, props)), false, 0)
			}
		}
	}()
	defer func() { close(stop); <-stopped }()
	listening(t, func(ctx context.Context) string {
		got, err := s.Probe(ctx)
		if err != nil {
			return err.Error()
		}
		if g := got[0]; g.Err != nil || g.Text != "2" || g.EULow != 0.5 || g.EUHigh != 4.5 || g.Unit != "m" {
			return fmt.Sprintf("%+v", g)
		}
		if g := got[1]; g.Err == nil || !strings.Contains(g.Err.Error(), `no metric "LIC-310/SetPoint"`) {
			return fmt.Sprintf("%+v", g)
		}
		return ""
	})
}
