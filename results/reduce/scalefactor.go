package reduce

import (
	"context"
	"math"

	"proofrate/limits/quantity"
)

// tableLine is the part of the table's calibration in a relative scale factor: shared by all gyros of the run.
func (m *measuredSweep) tableLine(slope float64) quantity.Line {
	return quantity.Line{Name: "rate of the table", Instrument: m.bench.Instrument + " table.rate", Value: 1, U: m.bench.TableRate.U,
		Sensitivity: -slope, Contribution: math.Abs(slope) * m.bench.TableRate.U, DoF: math.Inf(1)}
}

// linear makes the method of a figure that is smooth in the outputs.
func linear(figure func(Sweep) float64, ofTable bool) func(context.Context, Input) quantity.Measured {
	return func(_ context.Context, in Input) quantity.Measured {
		m, reason := sweepOf(in)
		if m == nil {
			return quantity.Voided(ratio, reason)
		}
		value := figure(m.Sweep)
		if math.IsNaN(value) || math.IsInf(value, 0) {
			return quantity.Voided(ratio, "the rates of the sweep do not determine it: at least two on each side that it takes are needed")
		}
		budget := m.parts(m.gradient(figure))
		if ofTable {
			budget = append(budget, m.tableLine(m.Line().Slope))
		}
		return quantity.T(value, ratio, present(budget))
	}
}

// The methods whose figure is smooth in the outputs. Budget: white and slow noise of the gyro, reading of the table's
// rate, centripetal acceleration; scale factor and its error: the table's calibration too, which the others do not feel.
// A constant input, the Earth's rate, moves no slope.
var (
	scaleFactor      = linear(func(s Sweep) float64 { return s.Line().Slope }, true)
	scaleFactorError = linear(Sweep.Error, true)
	asymmetry        = linear(Sweep.Asymmetry, false)
)
