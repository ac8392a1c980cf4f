package main

import "math"

// finite gives a number, or nil, which is null in JSON, for one that is not finite.
func finite(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	return &x
}
