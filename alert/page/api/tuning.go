package api

import (
	"encoding/json"
	"net/http"

	"midwatch/detect"
)

// TuningReading is gain (%/%) and reset time (s) in service at a time (ms UTC),
// each with the range the data allow. NaN is not known.
type TuningReading struct {
	Time                int64
	Gain                float64
	GainLow, GainHigh   float64
	ResetS              float64
	ResetLow, ResetHigh float64
	Read                bool // read from tags; else fitted to the data
}

// MarshalJSON leaves out what is not known.
func (r TuningReading) MarshalJSON() ([]byte, error) {
	by := "data"
	if r.Read {
		by = "tags"
	}
	return json.Marshal(struct {
		Time      string   `json:"time"`
		By        string   `json:"read_from"`
		Gain      *float64 `json:"gain,omitempty"` // %/%
		GainLow   *float64 `json:"gain_low,omitempty"`
		GainHigh  *float64 `json:"gain_high,omitempty"`
		ResetS    *float64 `json:"reset_s,omitempty"`
		ResetLow  *float64 `json:"reset_s_low,omitempty"`
		ResetHigh *float64 `json:"reset_s_high,omitempty"`
	}{detect.FormatTime(r.Time), by, known(r.Gain), known(r.GainLow), known(r.GainHigh), known(r.ResetS), known(r.ResetLow), known(r.ResetHigh)})
}

// tuning gives all kept readings of the tuning in service of a loop.
func (h handler) tuning(w http.ResponseWriter, r *http.Request) {
	name := r.PathValue("loop")
	if _, ok := h.House.View(name); !ok {
		fail(w, http.StatusNotFound, errNoLoop)
		return
	}
	rs, err := h.House.Tuning(r.Context(), name, 0)
	if err != nil {
		fail(w, http.StatusInternalServerError, err)
		return
	}
	if rs == nil {
		rs = []TuningReading{}
	}
	answer(w, rs)
}
