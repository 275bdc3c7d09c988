// Package house holds the tests about the repository itself: which modules are
// linked and under which licence, which package may import which, what must not
// be written in a file, and that words which two packages keep are the same.
package house
