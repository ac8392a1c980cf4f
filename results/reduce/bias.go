package reduce

import (
	"context"
	"math"

	"proofrate/limits/quantity"
)

// bias is the mean output at rest, the Earth's rate on the input axis removed:
//
//	b = mean(y) - P (S/S_nom) (Omega_n + creep),   u_white = N/sqrt(T)
//
// P the polarity, S/S_nom from the scale-factor figure or 1, creep from the positions read during it. The truth is the
// mean over that window of everything but white noise and quantisation, so that slow noise is no part of the budget:
// white noise of the same recording and rounding; the direction of the table's axis (shared by all gyros) and the
// attitude of the gyro to it (shared by its figures, and turning with the table), each times the Earth's rate across the
// axis; creep; scale factor.
// Source: IEEE Std 952-1997, 12.8 (bias at rest); IEEE Std 528 for the term.
func bias(_ context.Context, in Input) quantity.Measured {
	s, reason := signalOf(in.Recordings[0], in.Gyro.Output)
	if reason != "" {
		return quantity.Voided(radPerS, reason)
	}
	along, across := in.Bench.earth()
	moved, known := creepOf(in.Recordings[0])
	switch {
	case !known:
		moved = creep{0, in.Bench.Creep / math.Sqrt(3), math.Inf(1)}
	case math.Abs(moved.rate) > creepMost:
		return quantity.Voided(radPerS, "the table crept by "+quantity.FromSI(moved.rate, quantity.MustUnit("deg/h")).String()+" during it; it was not at rest")
	}
	x := along + in.Bench.Sense*moved.rate
	scale, scaleU, scaleDoF := 1.0, 0.0, math.Inf(1)
	if in.ScaleFactor != nil {
		scale, scaleU, scaleDoF = 1+in.ScaleFactor.Value, in.ScaleFactor.U, in.ScaleFactor.DoF
	}
	square, dof := s.white()
	white, rounding := math.Sqrt(square/s.seconds), s.rounding(square)
	budget := []quantity.Line{
		{Name: "white noise", U: white, Sensitivity: 1, Contribution: white, DoF: dof},
		{Name: "quantisation", U: rounding, Sensitivity: 1, Contribution: rounding, DoF: math.Inf(1)},
		{Name: "axis of the table", Instrument: in.Bench.Instrument + " axis", U: in.Bench.AxisU, Sensitivity: across, Contribution: across * in.Bench.AxisU, DoF: math.Inf(1)},
		{Name: "creep of the table", Value: moved.rate, U: moved.u, Sensitivity: -in.Gyro.Polarity * scale, Contribution: math.Abs(scale) * moved.u, DoF: moved.dof},
		{Name: "scale factor", Value: scale, U: scaleU, Sensitivity: -in.Gyro.Polarity * x, Contribution: math.Abs(x) * scaleU, DoF: scaleDoF},
	}
	return quantity.T(s.mean()-in.Gyro.Polarity*scale*x, radPerS, present(append(budget, attitude(in, across)...)))
}

// attitude is the part of the gyro's attitude to the table's axis: a tilt that is fixed to the table, so that the rate
// it lets in goes with the cosine and the sine of the table's angle. Rests at one angle share it, rests a quarter turn
// apart do not. Without a reading of the angle it is a part of its own.
func attitude(in Input, across float64) []quantity.Line {
	line := func(name, instrument string, sensitivity float64) quantity.Line {
		return quantity.Line{Name: name, Instrument: instrument, U: in.Bench.AttitudeU, Sensitivity: sensitivity,
			Contribution: math.Abs(sensitivity) * in.Bench.AttitudeU, DoF: math.Inf(1)}
	}
	_, angles := readings(in.Recordings[0], "table.position")
	if len(angles) == 0 || in.Bench.Slot == "" {
		return []quantity.Line{line("attitude in the slot", "", across)}
	}
	mean, _ := meanAndScatter(angles)
	sine, cosine := math.Sincos(mean * degree)
	shared := "slot " + in.Bench.Slot + " attitude "
	return []quantity.Line{line("attitude in the slot, one way", shared+"1", across*cosine), line("attitude in the slot, other way", shared+"2", across*sine)}
}

// creepMost is how fast a table at position hold may creep before the recording is no rest: 1 deg/h (our convention;
// a tenth of the Earth's rate).
const creepMost = 1 * degree / 3600

// present leaves out what contributes nothing.
func present(budget []quantity.Line) []quantity.Line {
	var list []quantity.Line
	for _, l := range budget {
		if l.Contribution > 0 {
			list = append(list, l)
		}
	}
	return list
}
