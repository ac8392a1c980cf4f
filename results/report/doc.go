// Package report writes what people read of a run.
package report
