package api

import (
	"encoding/json"
	"math"
	"reflect"
	"testing"
)

// What a reading is written as is read again; what is not known stays so.
func TestTuningReadingThereAndBack(t *testing.T) {
	n := math.NaN()
	for _, want := range []TuningReading{
		{Time: 1767679218923, Gain: 2.27, GainLow: 2.16, GainHigh: 2.38, ResetS: 7.7, ResetLow: 7.3, ResetHigh: 8.1},
		{Time: 1767679218000, Gain: 2.5, GainLow: n, GainHigh: n, ResetS: n, ResetLow: n, ResetHigh: n, Read: true},
	} {
		b, err := json.Marshal(want)
		if err != nil {
			t.Fatal(err)
		}
		var got TuningReading
		if err := json.Unmarshal(b, &got); err != nil {
			t.Fatal(err)
		}
		// NaN is not equal to itself: -1 in its place.
		plain := func(r TuningReading) TuningReading {
			for _, v := range []*float64{&r.Gain, &r.GainLow, &r.GainHigh, &r.ResetS, &r.ResetLow, &r.ResetHigh} {
				if math.IsNaN(*v) {
					*v = -1
				}
			}
			return r
		}
		if !reflect.DeepEqual(plain(got), plain(want)) {
			t.Errorf("%s: %+v, want %+v", b, got, want)
		}
	}
	if err := json.Unmarshal([]byte(`{"time":"yesterday"}`), new(TuningReading)); err == nil {
		t.Error("a time that is none was taken")
	}
}
