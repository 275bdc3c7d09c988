package configs

import (
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strings"
	"unicode/utf8"
)

// entry is a loop while it is read: with the places of its values.
type entry struct {
	loop *Loop
	at   map[string]Position // by column, of those given
}

// place is where a column was given, or else where the loop begins.
func (e *entry) place(column string) Position {
	if p, ok := e.at[column]; ok {
		return p
	}
	return e.loop.Where
}

// maxTuning is far beyond any gain in %/% or time in s of a controller.
const maxTuning = 1e9

type cell struct {
	text string
	at   Position
}

// LoadLoopList reads a loop list from a CSV file. The error is a Problems when
// the contents are at fault.
func LoadLoopList(path string) ([]*Loop, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("cannot read the loop list: %w", err)
	}
	defer f.Close()
	return ReadLoopList(f, path)
}

// ReadLoopList reads a loop list in CSV; name stands for the file in messages.
// Sources and the shape of tags are not checked: that takes a configuration.
func ReadLoopList(r io.Reader, name string) ([]*Loop, error) {
	data, err := io.ReadAll(r)
	if err != nil {
		return nil, fmt.Errorf("cannot read the loop list %s: %w", name, err)
	}
	var c problemList
	entries := readLoopCSV(name, data, &c)
	checkLoopNames(entries, &c)
	if err := c.err(); err != nil {
		return nil, err
	}
	return loopsOf(entries), nil
}

func loopsOf(entries []*entry) []*Loop {
	loops := make([]*Loop, len(entries))
	for i, e := range entries {
		loops[i] = e.loop
	}
	return loops
}

// readLoopCSV reads what it can and reports the rest. Lines that begin with #
// are comments; rows without any value are skipped.
func readLoopCSV(file string, data []byte, c *problemList) []*entry {
	if !checkEncoding(file, withoutBOM(data), "CSV", c) {
		return nil
	}
	data = withoutBOM(data)
	lines := bytes.Split(data, []byte("\n"))
	r := csv.NewReader(bytes.NewReader(data))
	r.Comment, r.FieldsPerRecord, r.TrimLeadingSpace, r.ReuseRecord = '#', -1, true, true
	var header []int // column index per field, -1 unknown
	var names []string
	var entries []*entry
	for {
		record, err := r.Read()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			csvProblem(file, lines, err, c)
			continue
		}
		at := func(i int) Position { return fieldPlace(file, lines, r, i) }
		if header == nil {
			if !checkSeparator(record, at(0), c) {
				return nil
			}
			names = append([]string(nil), record...)
			if header = readHeader(record, at, c); header == nil {
				return nil
			}
			continue
		}
		if e := readRow(record, header, names, at, c); e != nil {
			entries = append(entries, e)
		}
	}
	if header == nil && len(c.list) == 0 {
		c.add(Position{file, 1, 1}, "", "begin with a line of column names such as loop,pv,sp,op", "the loop list is empty")
	}
	return entries
}

// fieldPlace counts columns in characters, as editors do.
func fieldPlace(file string, lines [][]byte, r *csv.Reader, i int) Position {
	line, col := r.FieldPos(i)
	if line-1 < len(lines) && col-1 <= len(lines[line-1]) {
		col = utf8.RuneCount(lines[line-1][:col-1]) + 1
	}
	return Position{file, line, col}
}

func csvProblem(file string, lines [][]byte, err error, c *problemList) {
	var pe *csv.ParseError
	if !errors.As(err, &pe) {
		c.add(Position{File: file}, "", "", "cannot read CSV: %v", err)
		return
	}
	at := Position{file, pe.Line, pe.Column}
	hint := `a value with a quote in it stands in quotes, and the quote is written twice: "pump ""B"""`
	switch {
	case errors.Is(pe.Err, csv.ErrQuote) && pe.StartLine != pe.Line:
		at.Line, at.Column = pe.StartLine, 1
		c.add(at, "", "close it; "+hint, "a quote that opens in this row is never closed")
	case errors.Is(pe.Err, csv.ErrBareQuote):
		c.add(at, "", hint, "a quote inside a value")
	default:
		c.add(at, "", hint, "a quote out of place")
	}
}

// checkSeparator explains lists saved with another separator.
func checkSeparator(record []string, at Position, c *problemList) bool {
	if len(record) > 2 {
		return true
	}
	for sep, name := range map[string]string{";": "semicolons", "\t": "tabs"} {
		if strings.Contains(strings.Join(record, ","), sep) {
			c.add(at, "", "separate them by commas, and write numbers with a decimal point", "the columns are separated by %s", name)
			return false
		}
	}
	return true
}

func readHeader(record []string, at func(int) Position, c *problemList) []int {
	header := make([]int, len(record))
	seen := map[int]Position{}
	for i, name := range record {
		name = strings.TrimSpace(name)
		j, ok := columnIndex[name]
		switch first, dup := seen[j]; {
		case name == "":
			j = -1
		case !ok:
			j = -1
			c.add(at(i), name, unknownColumn(name), "unknown column")
		case dup:
			j = -1
			c.add(at(i), name, "keep one of the two", "the column is there twice, first at character %d", first.Column)
		default:
			seen[j] = at(i)
		}
		header[i] = j
	}
	if _, ok := seen[columnIndex["loop"]]; !ok {
		c.add(at(0), "loop", "the first line gives the names of the columns, such as loop,pv,sp,op", "there is no column loop")
		return nil
	}
	return header
}

func readRow(record []string, header []int, names []string, at func(int) Position, c *problemList) *entry {
	cells := map[string]cell{}
	blank := true
	for i, text := range record {
		text = strings.TrimSpace(text)
		if text == "" {
			continue
		}
		blank = false
		if i >= len(header) {
			break
		}
		if strings.TrimSpace(names[i]) == "" {
			c.add(at(i), "", "name the column in the first line, or clear the cell", "the value %q stands in a column without a name", text)
		} else if header[i] >= 0 {
			cells[columnNames[header[i]]] = cell{text, at(i)}
		}
	}
	if blank {
		return nil
	}
	if len(record) != len(header) {
		hint := "one comma is missing: empty cells need their commas"
		if len(record) > len(header) {
			hint = `put a value that holds a comma in quotes; write numbers with a decimal point`
		}
		c.addLoop(at(0), "", cells["loop"].text, hint, "the row has %d cells, the first line %d", len(record), len(header))
		return nil
	}
	return readLoop(cells, at(0), c)
}

// readLoop makes a loop of the values of a row or of an entry of loops. It
// returns a loop even when some values are wrong, so that the rest is checked.
func readLoop(cells map[string]cell, where Position, c *problemList) *entry {
	name := cells["loop"].text
	l := NewLoop(name)
	l.Where = where
	e := &entry{l, make(map[string]Position, len(cells))}
	if name == "" {
		c.add(where, "loop", "give each loop its name, such as AIC-204", "a loop without a name")
	} else if n := utf8.RuneCountInString(name); n > 64 {
		c.add(cells["loop"].at, "loop", "use at most 64", "the name has %d characters", n)
	}
	before := len(c.list)
	for _, col := range columns {
		x, ok := cells[col.name]
		if !ok {
			continue
		}
		e.at[col.name] = x.at
		if m := col.set(l, x.text); m != nil {
			c.addLoop(x.at, col.name, name, m.hint, "%s", m.what)
		}
	}
	checkTuning(e, c)
	if len(c.list) == before {
		// Limits follow the range where they are not given.
		e.defaultTo("op_limit_low", &l.OPLimitLow, l.OPLow)
		e.defaultTo("op_limit_high", &l.OPLimitHigh, l.OPHigh)
		e.defaultTo("sp_limit_low", &l.SPLimitLow, l.PVLow)
		e.defaultTo("sp_limit_high", &l.SPLimitHigh, l.PVHigh)
		checkLoop(e, c)
		l.settleTuning()
		for column, x := range map[string]float64{"gain": l.GainPct, "reset": l.IdealReset, "rate": l.RateS} {
			if math.IsInf(x, 0) || x > maxTuning || x < 0 {
				c.addLoop(e.place(column), column, name, "check the number and its unit", "the %s comes out absurd", column)
			}
		}
	}
	return e
}

func (e *entry) has(column string) bool {
	_, ok := e.at[column]
	return ok
}

func (e *entry) defaultTo(column string, p *float64, v float64) {
	if !e.has(column) {
		*p = v
	}
}
