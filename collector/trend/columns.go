package trend

import (
	"fmt"
	"slices"
	"strings"
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

// columnNames are the columns in the order of field; the first required are.
var columnNames = [...]string{"time", "loop", "pv", "sp", "op", "mode", "flags", "gain", "reset_s", "feedforward", "position"}

const required = 5

var columnHint = "hint: columns are " + strings.Join(columnNames[:required], ", ") + " (required), " +
	strings.Join(columnNames[required:], ", ") + " (optional), separated by commas, in any order"

// readHeader gives the field of each column and the names of columns that mean
// nothing.
func readHeader(line []byte) (fields []field, ignored []string, err error) {
	names, ok := splitQuoted(line, nil)
	if !ok {
		return nil, nil, fmt.Errorf("the header has a quote that is not closed; %s", columnHint)
	}
	var seen [len(columnNames)]bool
	for _, raw := range names {
		name := strings.ToLower(strings.TrimSpace(string(raw)))
		i := slices.Index(columnNames[:], name)
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
	for i, name := range columnNames[:required] {
		if !seen[i] {
			missing = append(missing, name)
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
