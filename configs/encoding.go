package configs

import (
	"bytes"
	"unicode/utf8"
)

// withoutBOM cuts the byte order mark that some editors and spreadsheets write.
func withoutBOM(data []byte) []byte { return bytes.TrimPrefix(data, []byte("\xef\xbb\xbf")) }

// checkEncoding reports a file that is not UTF-8 text, with the place.
func checkEncoding(file string, data []byte, form string, c *problemList) bool {
	save := "save it as UTF-8"
	if form == "CSV" {
		save = `save it as "CSV UTF-8"`
	}
	if bytes.HasPrefix(data, []byte("\xff\xfe")) || bytes.HasPrefix(data, []byte("\xfe\xff")) {
		c.add(Position{file, 1, 1}, "", save, "the file is UTF-16")
		return false
	}
	if bytes.HasPrefix(data, []byte("PK\x03\x04")) {
		c.add(Position{file, 1, 1}, "", "export it as "+form+" text", "the file is a spreadsheet or archive")
		return false
	}
	line := 1
	for text := range bytes.Lines(data) {
		col := 1
		for rest := text; len(rest) > 0; col++ {
			r, n := utf8.DecodeRune(rest)
			if r == utf8.RuneError && n == 1 {
				c.add(Position{file, line, col}, "", save, "the byte 0x%02X is not UTF-8", rest[0])
				return false
			}
			if r < ' ' && r != '\t' && r != '\n' && r != '\r' {
				c.add(Position{file, line, col}, "", "remove it", "there is a control character (0x%02X)", r)
				return false
			}
			rest = rest[n:]
		}
		line++
	}
	return true
}
