package dossier

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"
)

// Number is a value with its unit, its range and the count behind it; or the
// reason why there is none. The range is 90 % unless Kind says otherwise.
type Number struct {
	Value     float64
	Low, High float64 // NaN: no range
	Unit      string
	N         int    // count behind it; 0: not a statistic
	Kind      string // what the range is: "10 to 90 % of events"; empty: 90 % range
	Why       string // why there is no value
}

// number is a value that is known without a range.
func number(v float64, unit string) Number {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return Number{Value: math.NaN(), Low: math.NaN(), High: math.NaN(), Unit: unit, Why: "not known"}
	}
	return Number{Value: v, Low: math.NaN(), High: math.NaN(), Unit: unit}
}

// ranged is a value with its 90 % range.
func ranged(v, lo, hi float64, unit string) Number {
	n := number(v, unit)
	n.Low, n.High = lo, hi
	return n
}

// counted is a value with the count behind it.
func counted(v float64, n int, unit string) Number {
	x := number(v, unit)
	x.N = n
	return x
}

// none is a number that could not be had.
func none(why string) Number {
	return Number{Value: math.NaN(), Low: math.NaN(), High: math.NaN(), Why: why}
}

// spreadOf is the median of some values with the span of their middle 80 %.
func spreadOf(x []float64, unit, why string) Number {
	if len(x) == 0 {
		return none(why)
	}
	s := slices.Sorted(slices.Values(x))
	n := counted(quantile(s, 0.5), len(s), unit)
	if len(s) > 1 {
		n.Low, n.High, n.Kind = quantile(s, 0.1), quantile(s, 0.9), "10 to 90 % of them"
	}
	return n
}

// Known says whether there is a value.
func (n Number) Known() bool { return n.Why == "" && !math.IsNaN(n.Value) }

// String gives value, unit, range and count: "12.3 s (11 to 14, n 5)".
func (n Number) String() string {
	if !n.Known() {
		if n.Why == "" {
			return "not known"
		}
		return n.Why
	}
	s := short(n.Value)
	if n.Unit != "" {
		s += " " + n.Unit
	}
	in := ""
	if !math.IsNaN(n.Low) && !math.IsNaN(n.High) {
		in = short(n.Low) + " to " + short(n.High)
	}
	if n.N > 0 {
		if in != "" {
			in += ", "
		}
		in += fmt.Sprintf("n %d", n.N)
	}
	if in != "" {
		s += " (" + in + ")"
	}
	return s
}

// MarshalJSON writes value, unit, low, high, n; or why there is none.
func (n Number) MarshalJSON() ([]byte, error) {
	if !n.Known() {
		why := n.Why
		if why == "" {
			why = "not known"
		}
		return json.Marshal(map[string]string{"why": why})
	}
	type out struct {
		Value sig    `json:"value"`
		Unit  string `json:"unit,omitempty"`
		Low   *sig   `json:"low,omitempty"`
		High  *sig   `json:"high,omitempty"`
		Range string `json:"range,omitempty"`
		N     int    `json:"n,omitempty"`
	}
	o := out{Value: sig(n.Value), Unit: n.Unit, N: n.N}
	if !math.IsNaN(n.Low) && !math.IsNaN(n.High) {
		lo, hi := sig(n.Low), sig(n.High)
		o.Low, o.High, o.Range = &lo, &hi, n.Kind
		if o.Range == "" {
			o.Range = "90 %"
		}
	}
	return json.Marshal(o)
}

// sig is a number written with four significant digits; what is not finite is
// null.
type sig float64

func (v sig) MarshalJSON() ([]byte, error) {
	if math.IsNaN(float64(v)) || math.IsInf(float64(v), 0) {
		return []byte("null"), nil
	}
	r, err := strconv.ParseFloat(strconv.FormatFloat(float64(v), 'g', 4, 64), 64)
	if err != nil {
		return nil, err
	}
	return strconv.AppendFloat(nil, r, 'g', -1, 64), nil
}

// short writes three significant digits without an exponent where that is short.
func short(v float64) string {
	if math.IsInf(v, 1) {
		return "∞"
	}
	if math.IsNaN(v) {
		return "?"
	}
	r, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 3, 64), 64)
	if err != nil {
		return "?"
	}
	if a := math.Abs(r); a >= 1000 && a < 1e7 {
		return strconv.FormatFloat(math.Round(v), 'f', -1, 64)
	} else if a != 0 && (a < 1e-4 || a >= 1e7) {
		return strconv.FormatFloat(r, 'g', -1, 64)
	}
	return strconv.FormatFloat(r, 'f', -1, 64)
}

// Fact is one line of a section: a number or a text under a label.
type Fact struct {
	Key    string  `json:"key"`
	Label  string  `json:"label"`
	Number *Number `json:"number,omitempty"`
	Text   string  `json:"text,omitempty"`
	Note   string  `json:"note,omitempty"`
}

func fact(key, label string, n Number, note string) Fact {
	return Fact{Key: key, Label: label, Number: &n, Note: note}
}

func say(key, label, text string) Fact { return Fact{Key: key, Label: label, Text: text} }

// Says is the value of a fact in words.
func (f Fact) Says() string {
	if f.Number != nil {
		return f.Number.String()
	}
	return f.Text
}

func quantile(sorted []float64, q float64) float64 {
	if len(sorted) == 0 {
		return math.NaN()
	}
	x := q * float64(len(sorted)-1)
	i := int(x)
	if i+1 >= len(sorted) {
		return sorted[len(sorted)-1]
	}
	return sorted[i] + (x-float64(i))*(sorted[i+1]-sorted[i])
}

func median(x []float64) float64 { return quantile(slices.Sorted(slices.Values(x)), 0.5) }

// duration writes seconds in the unit a person would use.
func duration(s float64) string {
	switch a := math.Abs(s); {
	case math.IsNaN(s):
		return "?"
	case math.IsInf(s, 0):
		return "for ever"
	case a < 120:
		return short(s) + " s"
	case a < 2*3600:
		return short(s/60) + " min"
	case a < 2*86400:
		return short(s/3600) + " h"
	}
	return short(s/86400) + " days"
}
