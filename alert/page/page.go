// Package page is the page of the watch and its HTTP interface: which loop,
// since when, why, and whether to get up.
//
// [New] takes a [House], the running daemon behind a small interface. All views
// are HTML made here and can be read with scripts off; a small script adds the
// chart, filters without a reload and live updates. Everything is embedded:
// nothing is fetched from elsewhere.
//
// The page is for people; programs use the JSON below /api/. Both go through
// the same gate: Host check, tokens, origin check of every POST, limits.
package page
