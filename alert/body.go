package alert

import (
	"fmt"
	"html"
	"strings"
)

// page is the body of a message, written once and set twice: as plain text and
// as HTML. Whatever goes in is text; it is escaped where it is set.
type page struct {
	leads    []string
	facts    [][2]string
	sections []Section
	ends     []string
	links    []Link
}

func (p *page) lead(s string)                { p.leads = append(p.leads, s) }
func (p *page) fact(name, value string)      { p.facts = append(p.facts, [2]string{name, value}) }
func (p *page) section(t string, l []string) { p.sections = append(p.sections, Section{t, l}) }

func (p *page) foot(episode, key string, links []Link) {
	if episode != "" {
		p.ends = append(p.ends, "Episode "+episode)
	}
	p.ends = append(p.ends, "Message "+key)
	p.links = links
}

func (p *page) text(m *Message) string {
	var b strings.Builder
	for _, s := range p.leads {
		b.WriteString(wrap(s, "", 76))
		b.WriteString("\n")
	}
	width := 0
	for _, f := range p.facts {
		width = max(width, len(f[0])+2)
	}
	for _, f := range p.facts {
		b.WriteString(wrap(f[1], fmt.Sprintf("%-*s", width, f[0]+":"), 76))
	}
	for _, s := range p.sections {
		b.WriteString("\n" + s.Title + "\n")
		for _, l := range s.Lines {
			b.WriteString(wrap(l, "- ", 76))
		}
	}
	for _, l := range p.links {
		b.WriteString("\n" + sentence(l.Name) + ": " + l.URL)
	}
	if len(p.links) > 0 {
		b.WriteString("\n")
	}
	b.WriteString("\n")
	for _, c := range m.Cautions {
		b.WriteString(wrap(c, "", 76))
	}
	b.WriteString("\n" + strings.Join(p.ends, "\n") + "\n")
	return b.String()
}

// wrap breaks a text into lines; the first begins with head, the others are
// indented as far.
func wrap(s, head string, width int) string {
	var b strings.Builder
	b.WriteString(head)
	n := len([]rune(head))
	indent := strings.Repeat(" ", n)
	col := n
	for i, w := range strings.Fields(s) {
		l := len([]rune(w))
		if i > 0 {
			if col+1+l > width {
				b.WriteString("\n" + indent)
				col = n
			} else {
				b.WriteByte(' ')
				col++
			}
		}
		b.WriteString(w)
		col += l
	}
	b.WriteByte('\n')
	return b.String()
}

// colours of the urgencies; with the words beside them, never alone.
var colours = map[Urgency]string{Now: "#d55e00", Morning: "#b37400", Note: "#0072b2"}

// PictureMark stands in the HTML where a sender that can show a picture puts it;
// others take it out.
const PictureMark = "<!-- trend -->"

func (p *page) html(m *Message) string {
	e := html.EscapeString
	var b strings.Builder
	colour := colours[m.Urgency]
	if colour == "" {
		colour = colours[Note]
	}
	fmt.Fprintf(&b, `<!doctype html>
<html lang="en"><head><meta charset="utf-8"><meta name="viewport" content="width=device-width,initial-scale=1"><title>%s</title></head>
<body style="margin:0;padding:16px;background:#f5f4f0;color:#1c2024;font:15px/1.45 system-ui,'Segoe UI',Roboto,'Noto Sans',sans-serif">
<div style="max-width:720px;margin:0 auto;background:#fff;border:1px solid #d9d8d2;border-left:5px solid %s;border-radius:3px;padding:12px 18px">
<h1 style="font-size:17px;margin:4px 0 10px">%s</h1>
`, e(m.Subject), colour, e(m.Subject))
	for _, s := range p.leads {
		fmt.Fprintf(&b, "<p style=\"margin:6px 0 12px\">%s</p>\n", e(s))
	}
	b.WriteString(PictureMark + "\n")
	if len(p.facts) > 0 {
		b.WriteString("<table role=\"presentation\" style=\"border-collapse:collapse\">\n")
		for _, f := range p.facts {
			fmt.Fprintf(&b, "<tr><td style=\"padding:3px 14px 3px 0;color:#5c646b;vertical-align:top;white-space:nowrap\">%s</td><td style=\"padding:3px 0\">%s</td></tr>\n", e(f[0]), e(f[1]))
		}
		b.WriteString("</table>\n")
	}
	for _, s := range p.sections {
		fmt.Fprintf(&b, "<h2 style=\"font-size:13px;color:#5c646b;margin:16px 0 6px\">%s</h2>\n<ul style=\"margin:0;padding-left:20px\">\n", e(s.Title))
		for _, l := range s.Lines {
			fmt.Fprintf(&b, "<li>%s</li>\n", e(l))
		}
		b.WriteString("</ul>\n")
	}
	if len(p.links) > 0 {
		b.WriteString("<p style=\"margin:14px 0 4px\">")
		for i, l := range p.links {
			if i > 0 {
				b.WriteString(" · ")
			}
			fmt.Fprintf(&b, "<a style=\"color:#0072b2\" href=\"%s\">%s</a>", e(l.URL), e(sentence(l.Name)))
		}
		b.WriteString("</p>\n")
	}
	b.WriteString("<p style=\"color:#5c646b;font-size:12.5px;border-top:1px solid #d9d8d2;margin:16px 0 0;padding-top:8px\">")
	for _, c := range m.Cautions {
		b.WriteString(e(c) + "<br>\n")
	}
	for _, l := range p.ends {
		b.WriteString(e(l) + "<br>\n")
	}
	b.WriteString("</p></div></body></html>\n")
	return b.String()
}
