package api

import (
	"encoding/json"
	"math"
	"net/http"
	"time"

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

// tuningJSON is the form of the contract.
type tuningJSON struct {
	Time      string   `json:"time"`
	By        string   `json:"read_from"`
	Gain      *float64 `json:"gain,omitempty"` // %/%
	GainLow   *float64 `json:"gain_low,omitempty"`
	GainHigh  *float64 `json:"gain_high,omitempty"`
	ResetS    *float64 `json:"reset_s,omitempty"`
	ResetLow  *float64 `json:"reset_s_low,omitempty"`
	ResetHigh *float64 `json:"reset_s_high,omitempty"`
}

// UnmarshalJSON reads the form of the contract.
func (r *TuningReading) UnmarshalJSON(b []byte) error {
	var j tuningJSON
	if err := json.Unmarshal(b, &j); err != nil {
		return err
	}
	at, err := time.Parse(time.RFC3339Nano, j.Time)
	if err != nil {
		return err
	}
	orNaN := func(v *float64) float64 {
		if v == nil {
			return math.NaN()
		}
		return *v
	}
	*r = TuningReading{at.UnixMilli(), orNaN(j.Gain), orNaN(j.GainLow), orNaN(j.GainHigh), orNaN(j.ResetS), orNaN(j.ResetLow), orNaN(j.ResetHigh), j.By == "tags"}
	return nil
}

// MarshalJSON leaves out what is not known.
func (r TuningReading) MarshalJSON() ([]byte, error) {
	by := "data"
	if r.Read {
		by = "tags"
	}
	return json.Marshal(tuningJSON{detect.FormatTime(r.Time), by, known(r.Gain), known(r.GainLow), known(r.GainHigh), known(r.ResetS), known(r.ResetLow), known(r.ResetHigh)})
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
