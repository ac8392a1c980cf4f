// Package rehearsal carries out a procedure on many virtual gyros and compares what was measured with the truth.
//
// A trial is one gyro and one bench, both drawn from the trial's seed, and a whole run by the same engine, figures and
// limits as on the line; recordings and evidence stay in memory. The truth of a figure is its own definition applied
// to what the gyro did without white noise and quantisation, under the inputs that were really there. A Report tells
// for every figure element how far it was off, what uncertainty was claimed, and how often the claimed interval held.
//
// Invariants: a trial depends on its seed alone; trials run side by side and are reported in the order of their seeds.
//
//	report, err := rehearsal.Rehearse(ctx, rehearsal.Config{Plan: plan, Open: open, Gyros: 40, Seed: 1})
package rehearsal
