package trend

import (
	"fmt"
	"slices"
	"strings"

	"midwatch/collector"
)

// field is what a column of the file holds.
type field uint8

const (
	fieldTime field = iota
	fieldLoop
	fieldPV
	fieldSP
	fieldOP
	fieldMode
	fieldFlags
	fieldGain
	fieldReset
	fieldFeedforward
	fieldPosition
	fieldOther // unknown: ignored
)

// A Column is one of the trend CSV, or a word of its column flags, with what it means.
type Column struct {
	Name, Meaning string
	Required      bool
}

// columns are in the order of field; the first required are.
var columns = [...]Column{
	{"time", "when the values were valid: RFC 3339 with its zone, such as 2026-01-04T02:31:10.500Z or 2026-01-04T03:31:10.500+01:00; rows are sorted by it, loops interleaved", true},
	{"loop", "name of the loop, as in the loop list", true},
	{"pv", "measurement, in the unit of pv_low and pv_high of the loop list (0 to 100 where they are left out)", true},
	{"sp", "set point in force, in the unit of PV", true},
	{"op", "output as the controller sends it, in the unit of op_low and op_high (0 to 100 where they are left out)", true},
	{"mode", "actual mode: " + strings.Join(collector.ModeWords[1:], ", ") + ", or a value of the loop's mode_map; empty is unknown: it is inferred", false},
	{"flags", "words below joined by +; without this column gaps are inferred from the times of the rows", false},
	{"gain", "gain read from the controller, % of OP per % of PV; empty is not read or unchanged", false},
	{"reset_s", "reset time read from the controller, s; empty is not read or unchanged", false},
	{"feedforward", "feed-forward signal: in the unit of OP where feedforward_kind is add, in its own where it is multiply; used where the loop list has feedforward and feedforward_kind", false},
	{"position", "actual stem, speed or stroke, in the unit of OP", false},
}

// flagMeanings are in the order of [collector.FlagWords].
var flagMeanings = [len(collector.FlagWords)]string{
	"PV did not arrive anew: the source lives and says that nothing changed",
	"PV is of uncertain quality",
	"the loop was out of sight before this row; on a row without values: from here on",
	"samples are known to be missing before this row",
	"the clock of the source stepped before this row",
	"suppress_when of the loop holds: advisories are suppressed by design",
	"active_when of the loop does not hold: the law cannot act",
	"read from history, not live",
	"names of the values are not confirmed",
	"rows were left out on purpose before this one",
	"range, action, process, sampling or tags of the loop changed here",
}

// emptyNumber says what holds for all columns of numbers.
const emptyNumber = "Numbers have a decimal point; an empty pv, sp or op is of bad quality."

const required = 5

var columnHint = "hint: columns are " + strings.Join(columnNames(0, required), ", ") + " (required), " +
	strings.Join(columnNames(required, len(columns)), ", ") + " (optional), separated by commas, in any order"

func columnNames(from, to int) (names []string) {
	for _, c := range columns[from:to] {
		names = append(names, c.Name)
	}
	return names
}

func flagColumns() (out []Column) {
	for i, w := range collector.FlagWords {
		out = append(out, Column{Name: w, Meaning: flagMeanings[i]})
	}
	return out
}

// Help describes the columns, and the words of flags, in lines of at most width.
func Help(width int) string {
	var b strings.Builder
	list := func(cs []Column) {
		for _, c := range cs {
			indent := fmt.Sprintf("  %-12s ", c.Name)
			text := c.Meaning
			if c.Required {
				text = "required; " + text
			}
			for len(text) > 0 {
				n := len(text)
				if most := width - len(indent); n > most {
					if n = strings.LastIndexByte(text[:most+1], ' '); n < 0 {
						n = most
					}
				}
				b.WriteString(indent + text[:n] + "\n")
				text, indent = strings.TrimLeft(text[n:], " "), strings.Repeat(" ", 15)
			}
		}
	}
	list(columns[:])
	b.WriteString("\n" + emptyNumber + "\nWords of flags:\n\n")
	list(flagColumns())
	return b.String()
}

// Markdown is what [Help] says, as tables.
func Markdown() string {
	var b strings.Builder
	b.WriteString("| column | | meaning |\n| --- | --- | --- |\n")
	for _, c := range columns {
		need := ""
		if c.Required {
			need = "required"
		}
		fmt.Fprintf(&b, "| `%s` | %s | %s |\n", c.Name, need, c.Meaning)
	}
	b.WriteString("\n" + emptyNumber + "\n\n| word of `flags` | meaning |\n| --- | --- |\n")
	for _, c := range flagColumns() {
		fmt.Fprintf(&b, "| `%s` | %s |\n", c.Name, c.Meaning)
	}
	return b.String()
}

// readHeader gives the field of each column and the names of columns that mean
// nothing.
func readHeader(line []byte) (fields []field, ignored []string, err error) {
	names, ok := splitQuoted(line, nil)
	if !ok {
		return nil, nil, fmt.Errorf("the header has a quote that is not closed; %s", columnHint)
	}
	var seen [len(columns)]bool
	for _, raw := range names {
		name := strings.ToLower(strings.TrimSpace(string(raw)))
		i := slices.IndexFunc(columns[:], func(c Column) bool { return c.Name == name })
		if i < 0 {
			fields = append(fields, fieldOther)
			ignored = append(ignored, strings.TrimSpace(string(raw)))
			continue
		}
		if seen[i] {
			return nil, nil, fmt.Errorf("column %q stands twice in the header; %s", name, columnHint)
		}
		seen[i] = true
		fields = append(fields, field(i))
	}
	var missing []string
	for i, c := range columns[:required] {
		if !seen[i] {
			missing = append(missing, c.Name)
		}
	}
	if len(missing) > 0 {
		return nil, nil, fmt.Errorf("no column %s in the header %q; %s", strings.Join(missing, ", "), clip(line, 120), columnHint)
	}
	return fields, ignored, nil
}

// splitQuoted cuts a line into fields at commas outside quotes; "" inside quotes
// is one quote. ok is false when a quote is not closed, or when something stands
// behind a closing quote.
func splitQuoted(line []byte, dst [][]byte) (fields [][]byte, ok bool) {
	for i := 0; ; {
		if i < len(line) && line[i] == '"' {
			var text []byte
			for i++; ; i++ {
				if i >= len(line) {
					return dst, false
				}
				if line[i] == '"' {
					if i+1 < len(line) && line[i+1] == '"' {
						i++
					} else {
						break
					}
				}
				text = append(text, line[i])
			}
			dst = append(dst, text)
			if i++; i < len(line) && line[i] != ',' {
				return dst, false
			}
		} else {
			start := i
			for i < len(line) && line[i] != ',' {
				i++
			}
			dst = append(dst, line[start:i])
		}
		if i >= len(line) {
			return dst, true
		}
		i++
	}
}

// clip shows the start of a line in a message.
func clip(line []byte, n int) string {
	if len(line) > n {
		return string(line[:n]) + "..."
	}
	return string(line)
}
