package reduce

import (
	"context"
	"math"

	"proofrate/limits/quantity"
)

// polarity is +1 if the output's change from the lowest to the highest rate has the sign that the gyro is declared to
// have, -1 if it has the other. It has no uncertainty: an output that hardly follows the table has no polarity and is
// void. Source: IEEE Std 528 for the term.
func polarity(_ context.Context, in Input) quantity.Measured {
	var low, high, yLow, yHigh float64
	for i, r := range in.Recordings {
		s, reason := signalOf(r, in.Gyro.Output)
		if reason != "" {
			return quantity.Voided(ratio, reason)
		}
		x, _, reason := input(r)
		if reason != "" {
			return quantity.Voided(ratio, reason)
		}
		x *= in.Bench.Sense
		if i == 0 || x < low {
			low, yLow = x, s.mean()
		}
		if i == 0 || x > high {
			high, yHigh = x, s.mean()
		}
	}
	if (high-low)/degree < restRate {
		return quantity.Voided(ratio, "the table did not turn at different rates")
	}
	gain := in.Gyro.Polarity * (yHigh - yLow) / (high - low)
	if math.Abs(gain) < gainLeast {
		return quantity.Voided(ratio, "the gyro hardly follows the table: a tenth of the nominal scale factor or less")
	}
	m := quantity.T(math.Copysign(1, gain), ratio, nil)
	m.DoF = math.Inf(1)
	return m
}

// gainLeast: below it the output does not follow the table and has no polarity.
const gainLeast = 0.1
