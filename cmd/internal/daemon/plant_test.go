package daemon

import (
	"context"
	"log/slog"
	"testing"
	"time"

	"midwatch/collector/plant"
	"midwatch/configs"
)

// The whole watch against a real OPC UA server and a real MQTT broker that count
// what is written to them: every loop is seen, nothing is lost, and nothing was
// written.
func TestReadsOnly(t *testing.T) {
	begin := epoch
	clock := Faster(begin, 20)
	srv, err := plant.Serve(context.Background(), plant.NewAt(1, begin), plant.ServeOptions{Clock: clock.Now})
	if err != nil {
		t.Fatal(err)
	}
	defer srv.Close()
	r := newRig(t, plant.LoopList(plant.Sources{OPCUA: "works", MQTT: "gateway"}))
	r.config.Sources = []configs.Source{
		{Name: "works", OPCUA: &configs.OPCUA{Endpoint: srv.Endpoint(), Security: "None", Mode: "None", Publish: 20 * time.Millisecond, KeepAliveCount: 10}},
		{Name: "gateway", MQTT: &configs.MQTT{Broker: srv.Broker(), Payload: "json", Value: "v", Time: "t", Quality: "q", Margin: 200 * time.Millisecond}},
	}
	o := r.options()
	o.Clock, o.Sources = clock, nil
	o.Logger = slog.New(slog.NewTextHandler(t.Output(), nil))
	d, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	if err := d.Start(); err != nil {
		t.Fatal(err)
	}
	r.d = d
	unseen := func() (names []string) {
		for _, l := range r.config.Loops {
			// One that is sampled every few minutes needs longer than this test.
			if v, ok := d.View(l.Name); (!ok || v.Last.Time == 0) && l.SampleS <= 30 {
				names = append(names, l.Name)
			}
		}
		return names
	}
	for deadline := time.Now().Add(hang); len(unseen()) > 0; time.Sleep(10 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Errorf("not seen: %v of %+v", unseen(), d.Status())
			break
		}
	}
	s := d.Status()
	if err := d.Stop(context.Background()); err != nil {
		t.Error(err)
	}
	if n := srv.Writes(); n != 0 {
		t.Errorf("%d writes and calls reached the server", n)
	}
	if n := srv.ForeignPublishes(); n != 0 {
		t.Errorf("%d messages reached the broker", n)
	}
	if n := s.Counts["samples_dropped"] + s.Counts["losses_reported"]; n != 0 {
		t.Errorf("%d samples lost: %v", n, s.Counts)
	}
}
