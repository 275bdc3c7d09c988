package configs

import (
	"bufio"
	"fmt"
	"io"
	"strings"
)

// WriteReference writes the reference of configuration and loop list in
// Markdown, made from the tables that read them.
func WriteReference(w io.Writer) error {
	b := bufio.NewWriter(w)
	b.WriteString(referenceHead)
	b.WriteString("## Settings\n\n| key | default | meaning |\n| --- | --- | --- |\n")
	writeSettings(b, settings(&Config{}), "")
	b.WriteString("\n## Loop list\n\n" + referenceLoops)
	group := ""
	for _, c := range columns {
		if c.group != group {
			group = c.group
			fmt.Fprintf(b, "\n### %s\n\n| column | default | meaning | a change at reload |\n| --- | --- | --- | --- |\n", group)
		}
		change := c.change.String()
		switch c.name {
		case "gain", "gain_unit", "reset", "reset_unit", "reset_s", "rate", "rate_unit", "rate_s":
			change = "verdict, if the tuning differs"
		}
		fmt.Fprintf(b, "| `%s` | %s | %s | %s |\n", c.name, tableCell(c.def), tableCell(c.help), change)
	}
	b.WriteString(referenceTail)
	return b.Flush()
}

func writeSettings(b *bufio.Writer, g group, path string) {
	for _, f := range g {
		key := joinKey(path, f.key)
		def := ""
		switch {
		case f.required:
			def = "required"
		case f.def != "":
			def = "`" + f.def + "`"
		}
		fmt.Fprintf(b, "| `%s` | %s | %s |\n", key, tableCell(def), tableCell(f.help))
		if f.open != nil {
			writeSettings(b, f.open(), key)
		}
		if f.list != nil {
			f.list.grow(Position{})
			writeSettings(b, f.list.item(f.list.len()-1), key+"[]")
		}
	}
}

func tableCell(s string) string { return strings.ReplaceAll(s, "|", `\|`) }

const referenceHead = `# Reference: configuration and loop list

This file is made from the tables in the program; ` + "`go test ./configs -run Reference -update`" + ` writes it anew.

midwatch advises; it is not an alarm or safety function. Change nothing on a controller without the site's management of change and a qualified person, and check the final element and the measurement first.

The configuration is one YAML document. Unknown keys, keys given twice, anchors, aliases, merge keys, tags, second documents and numbers with a leading zero are errors; all mistakes are reported in one run as ` + "`file:line:column: key: what is wrong; what would be right`" + `. Items of lists are counted from 1, as in ` + "`sources[1].name`" + `.

- Durations are numbers with a unit: ` + "`500ms`, `90s`, `10m`, `8h`, `14d`, `2w`" + `, or sums such as ` + "`1h30m`" + `. A day is 24 hours.
- Sizes are numbers with ` + "`kB`, `MB`, `GB` or `TB`" + ` (thousands).
- Hours are site time: ` + "`mon-fri 07:00-16:00`, `sat,sun 00:00-24:00`, `mon-thu 22:00-06:00`" + ` (over midnight, counted to the day on which they begin).
- Where a list of words is expected, a single word may stand alone.
- Relative paths count from the folder of the configuration file.
- Secrets stand in files of their own, named by ` + "`password_file`, `key_file`, `tokens_file`" + `. One newline at the end is cut. A file that everybody can read is an error. A path that begins with ` + "`$CREDENTIALS_DIRECTORY/`" + ` names a credential of the systemd unit (` + "`LoadCredential=`" + `).
- Each source and each sender has a name and exactly one kind. A name is letters, digits, ` + "`_`, `-` and `.`" + `, at most 32 characters.

`

const referenceLoops = `The loop list is CSV in UTF-8: columns separated by commas, numbers with a decimal point, the names of the columns in the first line, in any order. Only ` + "`loop`" + ` is required. An empty cell is unknown, or the default. Rows without a value are skipped, lines that begin with ` + "`#`" + ` are comments. The same names are the keys of an entry of ` + "`loops`" + ` in the configuration.
`

const referenceTail = `
"A change at reload": *text* restarts nothing; *verdict* judges anew and keeps the memory; *memory* begins a new memory, keeps the window and sets a mark in it. Two ways to write the same tuning are no change.

### Tags

- OPC UA: a node id with its namespace, ` + "`nsu=urn:kestrel-fen:plant;s=AIC-204.PV`" + ` (best) or ` + "`ns=2;s=AIC-204.PV`" + `; or a browse path from Objects, ` + "`/Objects/KestrelFen/AIC-204/PV`" + `.
- MQTT: a topic, ` + "`kestrel-fen/aic-204/pv`" + `, or with payload json ` + "`topic#path.in.the.json`" + `. No wildcards, no shared subscriptions.
- Sparkplug: ` + "`group/node/device#metric`" + `, or ` + "`group/node#metric`" + ` for a metric of the node.
- A tag belongs to the source of its loop. A tag of another source is written ` + "`source!address`" + `, as in ` + "`gateway!kestrel-fen/cip/active`" + `. An address that itself begins with letters and ` + "`!`" + ` is written with its source in front.
- A mode given by two tags: both in ` + "`mode`, joined by ` & `" + ` (with spaces), and pairs in ` + "`mode_map`" + `.

One tag may serve several loops: an outer OP that is an inner SP is read as a cascade, a shared OP as selector or standby. Inside one loop PV, SP and OP must differ.

### Tuning

Gain, reset and rate are written as the faceplate shows them; ` + "`check`" + ` prints both usual forms of each for comparison. Inside, only gain in %/% and times in seconds of the ideal form are used:

- proportional band: gain = 100 / band; 125 % is 0.8 %/%.
- OP units per PV unit: gain = value x PV span / OP span; 0.6 %/degC over 200 degC is 1.2 %/%.
- repeats/min: reset = 60 / value; 2 repeats/min is 30 s; 0.5 min is 30 s.
- series form with rate: F = 1 + rate/reset; gain x F, reset x F, rate / F; (2, 8 s, 2 s) is ideal (2.5, 10 s, 1.6 s).
- parallel form: reset is the integral gain, in the unit of the gain per second (` + "`1/s`" + `) or minute (` + "`1/min`" + `); reset time = gain / integral gain. The rate is the derivative gain; rate time = derivative gain / gain. A faceplate whose gain also acts on integral and derivative part is the ideal form. ` + "`reset_s` and `rate_s`" + ` are times in every form.
- reset ` + "`none`" + ` is a controller without integral action by design.

### Conditions

` + "`active_when` and `suppress_when`" + ` are up to four comparisons joined by ` + "`and`/`or`" + `; ` + "`and`" + ` binds tighter. A comparison is a tag, one of ` + "`= != < <= > >=`" + `, and a number or word, with spaces between the three. A tag or word that holds spaces stands in single or double quotes; a quote inside is written twice. Words know ` + "`=` and `!=`" + ` only.

` + "```" + `
nsu=urn:kestrel-fen:plant;s=P-310.Run = 1 and 'gateway!kestrel-fen/pump room/valve' != closed
` + "```" + `
`
