package others

import (
	"encoding/csv"
	"math"
	"strconv"
	"strings"

	"midwatch/configs"
)

// listing is what the loop list says of a loop.
type listing struct {
	tuning  bool // gain and reset are given
	process bool
	scan    bool
	reset   float64 // s, where it is not that of the law; 0: that
	duty    string
	normal  string
	inner   string
}

var columns = []string{"loop", "pv_low", "pv_high", "op_limit_low", "op_limit_high", "action", "gain", "reset_s", "rate_s", "form", "process", "inner", "normal_mode", "duty", "scan_s", "sample_s", "report"}

// rowsOf is the loop list, read as from a file.
func rowsOf(loops []*loop) []*configs.Loop {
	var b strings.Builder
	w := csv.NewWriter(&b)
	w.Write(columns)
	for _, l := range loops {
		w.Write(l.cells())
	}
	w.Flush()
	rows, err := configs.ReadLoopList(strings.NewReader(b.String()), "loops.csv")
	if err != nil {
		panic("others: a loop list that cannot be read: " + err.Error() + "\n" + b.String())
	}
	return rows
}

// cells are those of the loop's row.
func (l *loop) cells() []string {
	col := map[string]string{"loop": l.name, "action": "reverse", "duty": l.list.duty, "normal_mode": l.list.normal, "inner": l.list.inner,
		"pv_low": number(l.log.low), "pv_high": number(l.log.low + l.log.span), "sample_s": number(l.log.every)}
	if l.law.sign < 0 {
		col["action"] = "direct"
	}
	if l.law.low > 0 || l.law.high < 100 {
		col["op_limit_low"], col["op_limit_high"] = number(l.law.low), number(l.law.high)
	}
	if l.list.tuning {
		col["gain"], col["reset_s"] = number(l.law.kc), number(l.law.ti)
		if l.list.reset > 0 {
			col["reset_s"] = number(l.list.reset)
		}
		if l.law.td > 0 {
			col["rate_s"] = number(l.law.td)
			if l.law.form == series {
				col["form"] = "series"
			}
		}
	}
	if l.list.process {
		col["process"] = "self-regulating"
		if l.plant.locals(l.reach)[0].integrating {
			col["process"] = "integrating"
		}
	}
	if l.list.scan {
		col["scan_s"] = number(l.h)
	}
	if l.log.deadband > 0 {
		col["report"] = "exception"
	}
	var cells []string
	for _, name := range columns {
		cells = append(cells, col[name])
	}
	return cells
}

func number(v float64) string {
	if math.IsInf(v, 1) {
		return "none"
	}
	return strconv.FormatFloat(v, 'g', 6, 64)
}
