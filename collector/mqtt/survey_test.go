package mqtt

import (
	"context"
	"fmt"
	"strings"
	"testing"

	"midwatch/configs"
)

func TestSurvey(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	for topic, payload := range map[string]string{
		"kestrelfen/bay1/LIC-310/pv": "41.5", "kestrelfen/bay1/LIC-310/sp": "40", "kestrelfen/bay1/LIC-310/OUT": "33", "kestrelfen/bay1/LIC-310/mode": "auto",
		"kestrelfen/bay2/LIC-310/pv": `{"value":1}`, "kestrelfen/bay2/LIC-310/sp": `{"value":1}`,
		"kestrelfen/bay3/FIC-7":      `{"pv":1,"sp":2,"mv":3,"ts":4}`,
		"kestrelfen/bay4/all":        `{"ts":1,"AIC-204.PV":1,"AIC-204.SP":2,"AIC-204.OP":3,"other":5}`,
		"kestrelfen/weather/outside": "11", "kestrelfen/lonely/pv": "3",
	} {
		b.publish(topic, payload, true)
	}
	s := build(t, configs.MQTT{Broker: b.url()}, Options{})
	want := []string{
		"LIC-310 kestrelfen/bay1/LIC-310/pv kestrelfen/bay1/LIC-310/sp kestrelfen/bay1/LIC-310/OUT kestrelfen/bay1/LIC-310/mode",
		"bay2.LIC-310 kestrelfen/bay2/LIC-310/pv#value kestrelfen/bay2/LIC-310/sp#value  ",
		"FIC-7 kestrelfen/bay3/FIC-7#pv kestrelfen/bay3/FIC-7#sp kestrelfen/bay3/FIC-7#mv ",
		"AIC-204 kestrelfen/bay4/all#['AIC-204.PV'] kestrelfen/bay4/all#['AIC-204.SP'] kestrelfen/bay4/all#['AIC-204.OP'] ",
	}
	var got []*configs.Loop
	listening(t, func(ctx context.Context) string {
		var err error
		if got, err = s.Survey(ctx); err != nil {
			return err.Error()
		}
		lines := map[string]bool{}
		for _, l := range got {
			lines[strings.Join([]string{l.Name, l.PV, l.SP, l.OP, l.ModeTag}, " ")] = true
			if l.Source != "gateway" {
				t.Errorf("source %q", l.Source)
			}
		}
		for _, w := range want {
			if !lines[w] {
				return fmt.Sprintf("missing %q in %v", w, lines)
			}
		}
		if len(got) != len(want) {
			return fmt.Sprintf("%d loops, want %d: %v", len(got), len(want), lines)
		}
		return ""
	})
	// The draft can be watched as it is.
	for _, l := range got {
		for _, a := range []string{l.PV, l.SP} {
			build(t, configs.MQTT{}, Options{}, bind(1, 0, a))
		}
	}
}

func TestSurveyFailsInWords(t *testing.T) {
	t.Parallel()
	b := newBroker(t, &gate{silent: map[string]bool{"#": true}})
	for name, c := range map[string]struct {
		broker, want string
		g            bool
	}{
		"refused":   {b.url(), "a survey needs that permission", true},
		"no broker": {"mqtt://127.0.0.1:1", "nothing listens", false},
	} {
		t.Run(name, func(t *testing.T) {
			listening(t, func(ctx context.Context) string {
				if _, err := build(t, configs.MQTT{Broker: c.broker}, Options{}).Survey(ctx); err == nil || !strings.Contains(err.Error(), c.want) {
					return fmt.Sprint(err)
				}
				return ""
			})
		})
	}
}

func TestSurveySparkplug(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	props := spb{}.text(1, "engLow").text(1, "engHigh").bytes(2, spb{}.double(6, 0.5)).bytes(2, spb{}.double(6, 4.5))
	if err := b.srv.Publish("$sparkplug/certificates/"+db, spbMessage(noon, 1, named("LIC-310/PV").double(13, 2).bytes(9, props), named("LIC-310/SP").double(13, 2), named("Uptime").double(13, 2)), true, 0); err != nil {
		t.Fatal(err)
	}
	var got []*configs.Loop
	listening(t, func(ctx context.Context) string {
		var err error
		if got, err = build(t, configs.MQTT{Broker: b.url(), Payload: "sparkplug"}, Options{}).Survey(ctx); err != nil || len(got) != 1 {
			return fmt.Sprintf("%v, %d loops", err, len(got))
		}
		return ""
	})
	if l := got[0]; l.Name != "LIC-310" || l.PV != "KestrelFen/edge-1/bay1#LIC-310/PV" || l.PVLow != 0.5 || l.PVHigh != 4.5 || !l.PVRangeGiven {
		t.Errorf("%+v", l)
	}
}
