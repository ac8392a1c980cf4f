package reduce

import (
	"fmt"
	"math"

	"proofrate/results/recording"
)

// readings are the values of a bench reading during a recording.
func readings(r *recording.Recording, name string) (at, values []float64) {
	series, ok := r.Series(name)
	if !ok {
		return nil, nil
	}
	end := r.Start + r.Duration()
	for i, t := range series.At {
		if t >= r.Start && t <= end {
			at, values = append(at, t), append(values, series.Values[i])
		}
	}
	return at, values
}

const degree = math.Pi / 180

// restRate tells rest from turning, in deg/s, at the table's own reading.
const restRate = 0.01

// input is the mean rate of the table during a recording, about its own axis, in rad/s, with the standard uncertainty
// of reading it.
//
// At rest (below restRate) it is the slope of the positions, see creepOf; else the mean of the readings of the rate,
// whose scatter over the root of their number is the uncertainty, and at least that of their resolution. Never the
// command. Readings are those of the instrument: no correction is applied here.
func input(r *recording.Recording) (rate, u float64, reason string) {
	_, values := readings(r, "table.rate")
	if len(values) < 2 {
		return 0, 0, fmt.Sprintf("recording %s has %d readings of table.rate; at least two are needed", named(r), len(values))
	}
	mean, scatter := meanAndScatter(values)
	u = math.Max(scatter, resolution(values)) / math.Sqrt(float64(len(values)))
	if math.Abs(mean) >= restRate {
		return mean * degree, u * degree, ""
	}
	if c, ok := creepOf(r); ok {
		return c.rate, c.u, ""
	}
	return 0, (math.Abs(mean) + u) * degree, ""
}

// creep is how fast a table at position hold moved.
type creep struct{ rate, u, dof float64 } // rad/s

// creepOf is the slope of the least-squares line through the positions read during a recording:
//
//	rate = sum (t-tm)(p-pm) / sum (t-tm)^2,   u = s / sqrt(sum (t-tm)^2)
//
// s the scatter about the line, n-2 degrees of freedom, and at least the resolution's share. With two readings it is
// their difference over the time between them. False without two readings at different times.
func creepOf(r *recording.Recording) (creep, bool) {
	at, position := readings(r, "table.position")
	n := float64(len(at))
	if n < 2 {
		return creep{}, false
	}
	tm, _ := meanAndScatter(at)
	pm, _ := meanAndScatter(position)
	var tt, tp float64
	for i := range at {
		tt += (at[i] - tm) * (at[i] - tm)
		tp += (at[i] - tm) * (position[i] - pm)
	}
	if tt == 0 {
		return creep{}, false
	}
	slope := tp / tt
	square := 0.0
	for i := range at {
		e := position[i] - pm - slope*(at[i]-tm)
		square += e * e
	}
	s, dof := resolution(position), math.Inf(1)
	if n > 2 {
		if scatter := math.Sqrt(square / (n - 2)); scatter > s {
			s, dof = scatter, n-2
		}
	}
	return creep{slope * degree, s / math.Sqrt(tt) * degree, dof}, true
}

// resolution is the standard uncertainty of rounding: the smallest difference between readings that differ, over
// sqrt(12). The finest scale of common encoders and rate readings, 1e-5 degrees, stands in where none differ.
func resolution(values []float64) float64 {
	least := math.Inf(1)
	for i := 1; i < len(values); i++ {
		if d := math.Abs(values[i] - values[i-1]); d > 1e-9 {
			least = math.Min(least, d)
		}
	}
	if math.IsInf(least, 1) {
		least = 1e-5
	}
	return least / math.Sqrt(12)
}

// meanAndScatter are the mean and the sample standard deviation, in two passes; the scatter of one value is 0.
func meanAndScatter(values []float64) (mean, scatter float64) {
	for _, v := range values {
		mean += v
	}
	mean /= float64(len(values))
	if len(values) < 2 {
		return mean, 0
	}
	for _, v := range values {
		scatter += (v - mean) * (v - mean)
	}
	return mean, math.Sqrt(scatter / float64(len(values)-1))
}
