// Package daemon is the pipeline as a value.
package daemon
