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
// P the polarity, S/S_nom from the scale-factor figure or 1, creep from the positions read at both ends. Budget: white
// noise of the same recording; the direction of the table's axis (shared by all gyros) and the attitude of the gyro to
// it (shared by its figures, and turning with the table), each times the Earth's rate across the axis; creep; scale
// factor.
// Source: IEEE Std 952-1997, 12.8 (bias at rest); IEEE Std 528 for the term.
func bias(_ context.Context, in Input) quantity.Measured {
	s, reason := signalOf(in.Recordings[0], in.Gyro.Output)
	if reason != "" {
		return quantity.Voided(radPerS, reason)
	}
	along, across := in.Bench.earth()
	creep, creepU, known := creepOf(in.Recordings[0])
	if !known {
		creep, creepU = 0, in.Bench.Creep/math.Sqrt(3)
	} else if math.Abs(creep) > creepMost {
		return quantity.Voided(radPerS, "the table crept by "+quantity.FromSI(creep, quantity.MustUnit("deg/h")).String()+" during it; it was not at rest")
	}
	creep *= in.Bench.Sense
	scale, scaleU := 1.0, 0.0
	if in.ScaleFactor != nil {
		scale, scaleU = 1+in.ScaleFactor.Value, in.ScaleFactor.U
	}
	value := s.mean() - in.Gyro.Polarity*scale*(along+creep)
	white := math.Sqrt(s.whiteS(in.Gyro.Output) / s.seconds)
	budget := []quantity.Line{
		{Name: "white noise", U: white, Sensitivity: 1, Contribution: white, DoF: whiteDoF(len(s.counts), 1)},
		{Name: "axis of the table", Instrument: in.Bench.Instrument + " axis", U: in.Bench.AxisU, Sensitivity: across, Contribution: across * in.Bench.AxisU, DoF: math.Inf(1)},
		{Name: "creep of the table", U: creepU, Sensitivity: scale, Contribution: scale * creepU, DoF: math.Inf(1)},
		{Name: "scale factor", Value: scale, U: scaleU, Sensitivity: -(along + creep), Contribution: math.Abs(along+creep) * scaleU, DoF: math.Inf(1)},
	}
	return quantity.T(value, radPerS, present(append(budget, attitude(in, across)...)))
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

// polarity is +1 if the output's change from the lowest to the highest rate has the sign that the gyro is declared to
// have, -1 if it has the other.
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

// repeatability is the scatter of the mean output over turn-ons.
//
//	s^2 = sum (m_i - m)^2/(n-1),  w^2 = mean of N^2/T over the recordings
//	population: value^2 = s^2 - w^2, interval from chi-square with n-1 degrees of freedom, each bound^2 less w^2
//	sample:     the same value; u^2 = w^2/(n-1) (1 + w^2/(2 s'^2)), s' the value: only the measuring of these n
//
// Source: IEEE Std 528 for the term; e-Handbook 7.2.3 for the interval; the shift by w^2 is our own, see the tests.
func repeatability(_ context.Context, in Input) quantity.Measured {
	var means []float64
	w2 := 0.0
	for _, r := range in.Recordings {
		s, reason := signalOf(r, in.Gyro.Output)
		if reason != "" {
			return quantity.Voided(radPerS, reason)
		}
		means = append(means, s.mean())
		w2 += s.whiteS(in.Gyro.Output) / s.seconds
	}
	n := float64(len(means))
	w2 /= n
	_, scatter := meanAndScatter(means)
	if in.Options.Measurand == "population" {
		return quantity.Chi(scatter, w2, n-1, radPerS, nil)
	}
	value := math.Sqrt(math.Max(scatter*scatter-w2, 0))
	// With s' = 0 the spread that noise alone makes is left: s of n noises scatters by w/sqrt(2(n-1)).
	floor := math.Max(value*value, w2)
	u := math.Sqrt(w2 / (n - 1) * (1 + w2/(2*floor)))
	m := quantity.T(value, radPerS, []quantity.Line{{Name: "white noise", Value: math.Sqrt(w2), U: u, Sensitivity: 1, Contribution: u, DoF: math.Inf(1)}})
	m.Low = math.Max(m.Low, 0)
	return m
}
