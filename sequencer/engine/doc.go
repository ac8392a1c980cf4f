// Package engine carries out one procedure on one bench.
//
// A step of the plan becomes a machine: it starts, is ticked until it is done, and can be stopped. One loop ticks the
// machine at hand and its inner ones, sleeps by the bench's Clock, drains every powered gyro into its open taps (a tap
// cuts one recording out of the stream), and twice a bench second makes a round: it asks every instrument, takes every
// answer, and holds the guards against them. A slot is a gyro's place in the run; it is live until its trial ends.
//
// Invariants: the engine knows no link, profile or virtual bench, only roles; time is the Clock's; on every way out,
// a panic included, the bench is made safe before Run returns; a trial that ends leaves the other slots undisturbed;
// what was measured is in the sink before anything is judged.
//
//	e := engine.New(engine.Config{Plan: plan, Bench: bench, Trials: trials, Recorder: run, Seed: 1})
//	outcome, err := e.Run(ctx) // e.Status() from any goroutine meanwhile
package engine
