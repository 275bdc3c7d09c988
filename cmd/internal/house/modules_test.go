package house

import (
	"go/version"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
)

// licences are those that may be linked, each with words that its text has and
// the others have not.
var licences = map[string]string{
	"MIT":          "Permission is hereby granted, free of charge",
	"BSD-2-Clause": "Redistribution and use in source and binary forms",
	"BSD-3-Clause": "Redistribution and use in source and binary forms",
	"Apache-2.0":   "Apache License",
	"EDL-1.0":      "Eclipse Distribution License",
	"CC-BY-4.0":    "Creative Commons Attribution 4.0",
	"FTL":          "FreeType License",
}

var tableRow = regexp.MustCompile("(?m)^\\| `([^`]+)` \\| ([^|]+) \\| ([^|]+) \\|$")

// linkedTable reads the table of linked modules of DEVELOPERS.md: module to
// licence and reason.
func linkedTable(t *testing.T) map[string][2]string {
	t.Helper()
	_, text, ok := strings.Cut(read(t, "DEVELOPERS.md"), "\n## Linked modules\n")
	if !ok {
		t.Fatal("DEVELOPERS.md has no section Linked modules")
	}
	text, _, _ = strings.Cut(text, "\n## ")
	rows := map[string][2]string{}
	for _, m := range tableRow.FindAllStringSubmatch(text, -1) {
		if _, twice := rows[m[1]]; twice {
			t.Errorf("%s stands twice in the table", m[1])
		}
		rows[m[1]] = [2]string{strings.TrimSpace(m[2]), strings.TrimSpace(m[3])}
	}
	return rows
}

// Whoever ships the program must know what is in it and on what terms.
func TestLinkedModulesAreListed(t *testing.T) {
	rows := linkedTable(t)
	linked := map[string]string{}
	for _, p := range list[pkg](t, "-deps", "./cmd/midwatch") {
		if p.Module != nil && p.Module.Path != "midwatch" {
			linked[p.Module.Path] = p.Module.Dir
		}
	}
	for m, dir := range linked {
		row, ok := rows[m]
		if !ok {
			t.Errorf("%s is linked but not in the table of DEVELOPERS.md", m)
			continue
		}
		if row[1] == "" {
			t.Errorf("%s stands in the table without a reason", m)
		}
		words, ok := licences[row[0]]
		if !ok {
			t.Errorf("%s: licence %q is not one that may be linked", m, row[0])
			continue
		}
		if !strings.Contains(licenceText(t, dir), words) {
			t.Errorf("%s: its licence files do not contain %q, as a text of %s does", m, words, row[0])
		}
	}
	for m := range rows {
		if linked[m] == "" {
			t.Errorf("%s is in the table of DEVELOPERS.md but not linked", m)
		}
	}
}

func licenceText(t *testing.T, dir string) string {
	t.Helper()
	var all strings.Builder
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		n := strings.ToLower(e.Name())
		if e.IsDir() || !strings.HasPrefix(n, "licen") && !strings.HasPrefix(n, "copying") && !strings.HasPrefix(n, "edl") {
			continue
		}
		b, err := os.ReadFile(filepath.Join(dir, e.Name()))
		if err != nil {
			t.Fatal(err)
		}
		all.Write(b)
		all.WriteByte('\n')
	}
	// Some texts are wrapped in the middle of the words that are looked for.
	return strings.Join(strings.Fields(all.String()), " ")
}

// A module that asks for a later patch release than ours breaks the build of
// everybody who has GOTOOLCHAIN=local.
func TestNoModuleAsksForALaterGo(t *testing.T) {
	all := list[module](t, "-m", "all")
	i := slices.IndexFunc(all, func(m module) bool { return m.Path == "midwatch" })
	ours := "go" + all[i].GoVersion
	if !version.IsValid(ours) {
		t.Fatalf("go.mod asks for %q", ours)
	}
	for _, m := range all {
		if m.GoVersion != "" && version.Compare("go"+m.GoVersion, ours) > 0 {
			t.Errorf("%s asks for go %s, we promise %s", m.Path, m.GoVersion, ours)
		}
	}
}

// Tools must not bring their trees into the program, and only the demo may bring
// a broker.
func TestWhatMustNotBeLinked(t *testing.T) {
	for _, p := range list[pkg](t, "-deps", "./cmd/midwatch") {
		if slices.Contains([]string{"testing", "net/http/pprof"}, p.ImportPath) {
			t.Errorf("%s is linked into the program", p.ImportPath)
		}
	}
}
