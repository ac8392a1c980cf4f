// Package recording keeps what gyros sent.
//
// A Recording is the samples of one trial during one record step, by channels, as the counts that the gyro sent, with
// the labels of the loops around it and the bench's readings beside it. A Section is its head. A Sink takes recordings
// as they are measured: Memory keeps them, Writer also writes them to one file a trial, which a Seal proves afterwards.
// FORMAT.md says how the file is laid out.
//
// Invariants: what was appended is in the file at the end of each bench second; where blocks end depends on bench time
// only, and heads hold no wall time and no run id, so that equal seeds give equal bytes; a cut file opens with its whole
// blocks; a changed byte is found.
package recording
