package daemon

import (
	"fmt"
	"io"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
)

// evidenceLog writes what a loop is judged by at each decision. In short it leaves out
// what stands as it did at the decision before.
type evidenceLog struct {
	w     io.Writer
	whole bool
	last  map[string]evidenceLine // of the decision before, by words and place among the like
}

// evidenceLine is what counts of a line beside its words.
type evidenceLine struct {
	numbers []float64
	past    []bool // of each number that a limit is asked of: is it beyond it
}

var (
	// numbersIn are plain numbers; those of times belong to the words.
	numbersIn = regexp.MustCompile(`\d{4}-\d\d-\d\dT[0-9:.]+Z|-?\d+(?:\.\d+)?(?:e[-+]\d+)?`)
	// askedIn are numbers with the limit they are held against.
	askedIn = regexp.MustCompile(`(-?[0-9.]+)[^0-9(]*\(asked [^0-9)]*([0-9.]+)`)
)

func parseEvidence(line string) (words string, e evidenceLine) {
	words = numbersIn.ReplaceAllStringFunc(line, func(s string) string {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			return s
		}
		e.numbers = append(e.numbers, v)
		return "#"
	})
	for _, m := range askedIn.FindAllStringSubmatch(line, -1) {
		held, err1 := strconv.ParseFloat(m[1], 64)
		asked, err2 := strconv.ParseFloat(m[2], 64)
		e.past = append(e.past, err1 == nil && err2 == nil && held >= asked)
	}
	return
}

// like says whether nothing went past its limit or back; where no limits are asked, whether
// no number moved by half of itself or more. Both have the same words.
func (e evidenceLine) like(was evidenceLine) bool {
	if len(e.past) > 0 {
		return slices.Equal(e.past, was.past)
	}
	for i, a := range e.numbers {
		if b := was.numbers[i]; a != b && math.Abs(a-b) >= 0.5*math.Max(math.Abs(a), math.Abs(b)) {
			return false
		}
	}
	return true
}

// decided writes the lines of one decision under its head. Lines that are indented belong
// to the one above: it is written for each of them.
func (e *evidenceLog) decided(head string, lines []string) {
	fmt.Fprintln(e.w, head)
	now, left, above := map[string]evidenceLine{}, 0, ""
	for _, line := range lines {
		words, x := parseEvidence(line)
		for _, again := now[words]; again; _, again = now[words] {
			words += "+"
		}
		now[words] = x
		under := strings.HasPrefix(line, " ")
		if !under {
			above = ""
		}
		if was, ok := e.last[words]; !e.whole && ok && x.like(was) {
			if left++; !under {
				above = line
			}
			continue
		}
		if above != "" {
			e.write([]string{above})
			left, above = left-1, ""
		}
		e.write([]string{line})
	}
	e.last = now
	if left > 0 {
		fmt.Fprintf(e.w, "  (%d more as before, or nearly)\n", left)
	}
}

func (e *evidenceLog) write(lines []string) {
	for _, line := range lines {
		fmt.Fprintln(e.w, "  "+line)
	}
}
