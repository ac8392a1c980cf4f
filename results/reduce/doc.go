// Package reduce turns recordings into figures: the gyro metrology.
//
// A Method is one figure of the trade: what it needs, what it yields, its published source, and the function that
// reduces. Catalogue is the one table of them: checker, docs and engine read it. An Input is all that a method may
// look at: the element's recordings, what the bench file says of the bench, what the procedure says of the gyro.
//
// Inside, angles are radians, rates rad/s, times seconds; y is the output in units of the nominal scale factor.
// The signal model of one axis is
//
//	y = S/S_nom (w + nl(w)) + bias + slow noise + white noise + quantisation,  w = table rate + Earth rate on the input axis
//
// Invariants: a method is pure and deterministic; what cannot be measured is void with a reason, never an error or a
// NaN; sums over counts are exact; an uncertainty is derived, and its budget says from what.
package reduce
