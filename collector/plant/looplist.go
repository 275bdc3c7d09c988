package plant

import (
	"math"
	"strings"

	"midwatch/configs"
)

// URI is the namespace of the nodes of the OPC UA server.
const URI = "urn:kestrel-fen:plant"

// Prefix is the root of the MQTT topics.
const Prefix = "kestrel-fen"

// modeCodes is how the OPC UA server counts modes, as a mode map.
const modeCodes = "0=manual;1=auto;2=cascade;3=remote-sp;4=remote-output;16=tracking;99=out-of-service"

// Sources names the two sources of the works in the configuration, and how many
// of its loops the OPC UA server carries (0 = 8).
type Sources struct {
	OPCUA, MQTT string
	OPCUALoops  int
}

func (s Sources) count() int {
	if s.OPCUALoops == 0 {
		return defaultOPCUALoops
	}
	return s.OPCUALoops
}

// of is the source of loop i.
func (s Sources) of(i int) string {
	if i < s.count() {
		return s.OPCUA
	}
	return s.MQTT
}

// tag is the address of a value of loop i. Values are PV, SP, OP, MODE, GAIN,
// RESET and POSITION over OPC UA, the same in small letters over MQTT.
func (s Sources) tag(i int, upper, lower string) string {
	if i < s.count() {
		return "nsu=" + URI + ";s=" + works[i].name + "." + upper
	}
	return topic(&works[i]) + "#" + lower
}

func topic(s *spec) string { return Prefix + "/" + strings.ToLower(s.area) + "/" + s.name }

// LoopList is the loop list of the works: what a well-kept site would have
// written down of it when all was well. [configs.WriteLoopList] makes CSV of it.
func LoopList(src Sources) []*configs.Loop {
	var out []*configs.Loop
	for i := range works {
		s := &works[i]
		l := configs.NewLoop(s.name)
		l.Service, l.Area, l.Unit, l.Element = s.service, s.area, s.unit, s.element
		if l.Source = src.of(i); i < src.count() {
			l.ModeMap = modeCodes
		}
		l.PV, l.SP, l.OP = src.tag(i, "PV", "pv"), src.tag(i, "SP", "sp"), src.tag(i, "OP", "op")
		l.ModeTag = src.tag(i, "MODE", "mode")
		if s.gainTags {
			l.GainTag, l.ResetTag = src.tag(i, "GAIN", "gain"), src.tag(i, "RESET", "reset_s")
		}
		if s.positionTag {
			l.Position = src.tag(i, "POSITION", "position")
		}
		l.PVLow, l.PVHigh, l.PVRangeGiven = s.low, s.high, true
		l.SPLimitLow, l.SPLimitHigh = s.low, s.high
		l.Action = configs.Reverse
		if s.k < 0 {
			l.Action = configs.Direct
		}
		kc, ti, td := s.tuning()
		l.Gain, l.GainPct, l.Form, l.ScanS, l.SampleS = kc, kc, s.form, s.scan, math.Max(1, float64(s.sample))
		l.RateS = td
		l.ResetGiven = true
		if ti > 0 {
			l.ResetS, l.IdealReset = ti, ti
		} else {
			l.PropOnly = true
		}
		if td > 0 && s.form == configs.Series {
			f := 1 + td/ti
			l.GainPct, l.IdealReset = kc*f, ti*f
		}
		l.Process = configs.SelfRegulating
		if s.integrating() {
			l.Process = configs.Integrating
		}
		l.Duty = s.duty
		if s.mode != "" {
			l.NormalMode = s.mode
		}
		switch s.role {
		case outer:
			l.Inner = s.with
		case splitRange:
			l.OPSplit = 50
		case flowPaced:
			for j := range works {
				if works[j].name == s.with {
					l.Feedforward, l.FeedforwardKind = src.tag(j, "PV", "pv"), "multiply"
					if j < src.count() != (i < src.count()) {
						l.Feedforward = src.of(j) + ":" + l.Feedforward
					}
				}
			}
		}
		out = append(out, l)
	}
	return out
}
