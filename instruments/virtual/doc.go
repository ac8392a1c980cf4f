// Package virtual is the virtual bench: seeded physics of a rate table, a thermal chamber, a supply and gyros of three
// families, which speak the bytes of their instruments over memory links.
//
// A World is the bench with its clock, its event queue and its parts. A population says how the parameters of a kind
// of gyro are spread; a Setup says which population a slot's gyro is drawn from. Truth is what the world alone knows:
// the drawn parameters, the hidden errors of the bench, and the noise-free output of any window.
//
// Invariants: one goroutine; everything that happens has one place in one order. Time moves only through Advance and
// Sleep, in steps that do not matter: the bytes are the same however a wait is sliced and however often a link is
// looked at. Every part draws from its own stream, so that a part more changes nothing in the others; white noise
// comes from a fresh stream each bench second, and slow noise goes on while a gyro is off. Only rehearsal and tests
// ask for the Truth.
//
//	world, err := virtual.New(virtual.Config{Seed: 1, Description: d, Gyros: map[instruments.SlotID]virtual.Setup{
//		"A": {Population: "optical"}}})
//	table, err := world.Link("table")
//	err = table.Send([]byte("RATE +12.50000 ACC 50.000\r\n"))
//	err = world.Sleep(ctx, time.Hour)
package virtual
