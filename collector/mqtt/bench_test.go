package mqtt

import (
	"context"
	"fmt"
	"syscall"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

var (
	plainConfig = configs.MQTT{Broker: "mqtt://127.0.0.1:1"}
	spbBindings = []collector.Binding{bind(1, collector.RolePV, "KestrelFen/edge-1/bay1#LIC-310/PV"),
		bind(1, collector.RoleSP, "KestrelFen/edge-1/bay1#LIC-310/SP"), bind(1, collector.RoleOP, "KestrelFen/edge-1/bay1#LIC-310/OP")}
)

// bench is a decoder with messages that go round, each with another time.
type bench struct {
	s    *source
	next func(i int) (topic string, payload []byte)
}

func benches(t testing.TB) map[string]bench {
	out := map[string]bench{}
	const loops = 1000
	names := make([]string, loops)
	var plain, object []collector.Binding
	for i := range loops {
		names[i] = fmt.Sprintf("kestrelfen/bay%d/LIC-%04d", i%4, i)
		plain = append(plain, bind(collector.LoopID(i), collector.RolePV, names[i]+"/pv"))
		for _, r := range []collector.Role{collector.RolePV, collector.RoleSP, collector.RoleOP} {
			object = append(object, bind(collector.LoopID(i), r, fmt.Sprintf("%s#%s", names[i], []string{"pv", "sp", "op"}[r])))
		}
	}
	topics := make([]string, loops)
	for i := range names {
		topics[i] = names[i] + "/pv"
	}
	number := []byte("51.237")
	out["plain"] = bench{build(t, plainConfig, Options{}, plain...), func(i int) (string, []byte) { return topics[i%loops], number }}
	json := configs.MQTT{Payload: "json", Time: "ts", Quality: "quality"}
	text := []byte(`{"pv":51.237,"sp":50,"op":33.512,"mode":"auto","quality":"good","ts":"2026-01-04T12:00:00.000Z"}`)
	out["object"] = bench{build(t, json, Options{}, object...), func(i int) (string, []byte) {
		copy(text[len(text)-6:], fmt.Append(make([]byte, 0, 4), 100+i/loops%900)[:3])
		return names[i%loops], text
	}}
	sp := plainConfig
	sp.Payload = "sparkplug"
	s := build(t, sp, Options{}, spbBindings...)
	f := feedInto(s)
	f.send(noon, db, spbMessage(noon, 0, named("LIC-310/PV").varint(2, 1).varint(4, spbDouble), named("LIC-310/SP").varint(2, 2).varint(4, spbDouble), named("LIC-310/OP").varint(2, 3).varint(4, spbDouble)), false)
	var data [256][]byte
	for i := range data {
		data[i] = spbMessage(noon+int64(i), i, byAlias(1).double(13, float64(i)), byAlias(2).double(13, 50), byAlias(3).double(13, 20))
	}
	out["sparkplug, 3 metrics by alias"] = bench{s, func(i int) (string, []byte) { return dd, data[i%256] }}
	return out
}

// BenchmarkDecode is the cost of one message from the ring to the samples.
func BenchmarkDecode(b *testing.B) {
	for name, x := range benches(b) {
		b.Run(name, func(b *testing.B) {
			b.ReportAllocs()
			i := 0
			var m message
			for b.Loop() {
				topic, payload := x.next(i)
				m = message{topic, payload, false, noon + int64(i)}
				x.s.message(&m)
				x.s.out, x.s.ticks = x.s.out[:0], x.s.ticks[:0]
				i++
			}
		})
	}
}

// TestDecodingMakesNoGarbage: in the steady state a message costs no allocation.
func TestDecodingMakesNoGarbage(t *testing.T) {
	for name, x := range benches(t) {
		topic, payload := x.next(0)
		i := int64(0)
		var m message
		run := func() {
			m = message{topic, payload, false, noon + i}
			x.s.message(&m)
			x.s.out, x.s.ticks = x.s.out[:0], x.s.ticks[:0]
			i++
		}
		for range 100 {
			run()
		}
		if n := testing.AllocsPerRun(1000, run); n != 0 {
			t.Errorf("%s: %v allocations per message", name, n)
		}
		if c := x.s.counts; c.malformed != 0 || c.unresolved != 0 || c.unmatched != 0 {
			t.Errorf("%s: not what was to be measured: %+v", name, c)
		}
	}
}

// BenchmarkFeed is 2,000 loops of three topics at 1 Hz from feed.mjs through
// Mosquitto, for 10 s. It reports CPU per message of this process and what was lost.
func BenchmarkFeed(b *testing.B) {
	for _, form := range []string{"plain", "object"} {
		b.Run(form, func(b *testing.B) {
			for range b.N {
				feedOnce(b, form)
			}
		})
	}
}

func feedOnce(b *testing.B, form string) {
	m := newMosquitto(b)
	const loops = 2000
	cfg := configs.MQTT{Broker: m.url(), Payload: "json", Time: "ts"}
	if form == "plain" {
		cfg = configs.MQTT{Broker: m.url()}
	}
	s := build(b, cfg, Options{}, feedBindings(form, loops)...)
	s.pace = usualPace
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, nowhere{}) }()
	eventually(b, "watching", watching(s))
	var before, after syscall.Rusage
	syscall.Getrusage(syscall.RUSAGE_SELF, &before)
	rep, _ := startFeed(b, m, "UTC", "--loops", fmt.Sprint(loops), "--rate", "1", "--form", form, "--time", "ms", "--seconds", "10").end()
	syscall.Getrusage(syscall.RUSAGE_SELF, &after)
	st := s.State()
	cancel()
	<-done
	cpu := time.Duration(after.Utime.Nano() + after.Stime.Nano() - before.Utime.Nano() - before.Stime.Nano())
	n := st.Counts["messages"]
	b.ReportMetric(float64(cpu.Microseconds())/float64(n), "us-CPU/msg")
	b.ReportMetric(float64(n), "messages")
	b.ReportMetric(float64(rep.Published)-float64(n), "lost")
}
