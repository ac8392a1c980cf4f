// Package instruments says what the engine may ask of an instrument on a gyro acceptance bench.
//
// A role is a kind of instrument: table, chamber, supply, gyro, meter. A Reading is one measured value with the time
// at which it was true. A Bench is the station as opened: its clock, its instruments and its slots; a Description is
// the same station as its file describes it, with no hardware touched.
//
// Invariants: every wait goes through the Clock, so that a virtual bench passes eight hours in seconds; a reading is
// measured, never the echo of a command; a request beyond an instrument's range is refused, never clipped; one
// request is in flight a link, and different links overlap: ask all, then take all.
//
//	pending, err := table.Ask(ctx, "table.rate")   // sent
//	...                                            // ask the others
//	reading, err := pending.Take(ctx)              // waited for
package instruments
