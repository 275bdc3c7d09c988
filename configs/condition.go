package configs

import (
	"math"
	"strings"
)

// maxTerms is the number of comparisons a condition may have.
const maxTerms = 4

// ParseCondition reads active_when or suppress_when: up to four comparisons
// "TAG OP VALUE" joined by and/or, parts separated by spaces. "and" binds
// tighter than "or". A tag or word with spaces stands in single or double
// quotes; a quote inside is written twice. OP is one of = != < <= > >=; words
// know = and != only.
func ParseCondition(s string) (Condition, error) {
	c, m := parseCondition(s)
	if m != nil {
		return Condition{}, Problems{{What: m.what, Hint: m.hint}}
	}
	return c, nil
}

func parseCondition(s string) (Condition, *mistake) {
	const hint = "write TAG = VALUE, with spaces around =, joined by and/or; a tag with spaces stands in quotes"
	c := Condition{Text: strings.TrimSpace(s)}
	parts, m := splitQuoted(c.Text)
	if m != nil {
		return c, m
	}
	group := 0
	for i := 0; i < len(parts); i += 4 {
		if i+2 >= len(parts) {
			return c, wrong(hint, "%q is no whole comparison", joinParts(parts[i:]))
		}
		if len(c.Terms) == maxTerms {
			return c, wrong("make one tag of them in the controller or gateway", "more than %d comparisons", maxTerms)
		}
		t := Term{Tag: parts[i].text, Op: parts[i+1].text, Group: group, Value: math.NaN()}
		if usual, ok := otherOps[t.Op]; ok {
			return c, wrong("write "+usual, "%q is no comparison", t.Op)
		}
		if !knownOp(t.Op) || parts[i+1].quoted {
			return c, wrong(hint, "%q is no comparison (= != < <= > >=)", t.Op)
		}
		if t.Tag == "" {
			return c, wrong(hint, "a comparison without a tag")
		}
		value := parts[i+2]
		if x, m := parseNumber(value.text); m == nil && !value.quoted {
			t.Value = x
		} else if decimalComma.MatchString(value.text) && !value.quoted {
			return c, m
		} else if value.text == "" {
			return c, wrong(hint, "a comparison without a value")
		} else if t.Op != "=" && t.Op != "!=" {
			return c, wrong("compare with a number, or use = or !=", "%q is no number and cannot be less or greater", value.text)
		} else {
			t.Word = value.text
		}
		c.Terms = append(c.Terms, t)
		if i+3 < len(parts) {
			switch strings.ToLower(parts[i+3].text) {
			case "and":
			case "or":
				group++
			default:
				return c, wrong(hint, "%q stands where and/or is expected", parts[i+3].text)
			}
			if i+4 == len(parts) {
				return c, wrong("write another comparison behind it or remove it", "%q at the end", parts[i+3].text)
			}
		}
	}
	return c, nil
}

var otherOps = map[string]string{"==": "=", "<>": "!=", "=<": "<=", "=>": ">=", "is": "=", "≠": "!=", "≤": "<=", "≥": ">="}

func knownOp(s string) bool {
	switch s {
	case "=", "!=", "<", "<=", ">", ">=":
		return true
	}
	return false
}

type part struct {
	text   string
	quoted bool
}

func joinParts(p []part) string {
	var s []string
	for _, x := range p {
		s = append(s, x.text)
	}
	return strings.Join(s, " ")
}

// splitQuoted cuts at spaces outside quotes. A quote opens only at the start of
// a part, so that topics and node ids may hold one.
func splitQuoted(s string) ([]part, *mistake) {
	var out []part
	for {
		s = strings.TrimLeft(s, " ")
		if s == "" {
			return out, nil
		}
		if q := s[0]; q == '"' || q == '\'' {
			text, rest, ok := cutQuoted(s)
			if !ok {
				return out, wrong("close the quote, and put a space behind it", "a quote %c is not closed: %s", q, s)
			}
			out, s = append(out, part{text, true}), rest
			continue
		}
		word, rest, _ := strings.Cut(s, " ")
		out, s = append(out, part{word, false}), rest
	}
}

func cutQuoted(s string) (text, rest string, ok bool) {
	q := s[0]
	var b strings.Builder
	for i := 1; i < len(s); i++ {
		if s[i] != q {
			b.WriteByte(s[i])
			continue
		}
		if i+1 < len(s) && s[i+1] == q {
			b.WriteByte(q)
			i++
			continue
		}
		if i+1 < len(s) && s[i+1] != ' ' {
			return "", "", false
		}
		return b.String(), s[i+1:], true
	}
	return "", "", false
}
