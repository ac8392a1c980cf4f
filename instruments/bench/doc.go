// Package bench reads bench files and opens the stations that they describe.
//
// A bench file names the station and its site, the instruments with their profiles, links and calibrations, and how
// they make up table, chamber and slots. Load turns it into a Loaded, whose Description is the whole station with no
// hardware touched; Open opens the links, identifies each instrument, and gives the bench as the engine knows it.
//
// Invariants: all mistakes of a file are found in one pass, each with its place; an instrument whose profile cannot
// fill the role it is put to is found by Load, never during a run. A bench is wholly virtual or wholly real. Whoever
// opens a bench closes it; links are closed in the reverse of the order in which they were opened.
//
//	loaded, file, wrong := bench.Load("virtual-bench", text, os.ReadFile)
//	opened, err := bench.Open(ctx, loaded, seed)
//	defer opened.Close()
package bench
