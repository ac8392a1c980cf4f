package reduce

import (
	"fmt"
	"math"
	"math/bits"

	"proofrate/results/recording"
)

// earthRate in rad/s: 7.292115e-5, 15.041067 deg/h. Source: WGS 84, NIMA TR8350.2.
const earthRate = 7.292115e-5

// signal is one channel of a recording as exact counts.
type signal struct {
	counts  []int64
	count   float64 // rad/s a count: of an angle increment, its angle over the sample interval
	tau0S   float64
	startS  float64
	seconds float64
}

// signalOf takes the channel that a method reduces. A gap is never bridged: a recording with lost frames is refused.
func signalOf(r *recording.Recording, output string) (signal, string) {
	if len(r.Gaps) > 0 {
		var lost uint64
		for _, g := range r.Gaps {
			lost += g.Lost
		}
		return signal{}, fmt.Sprintf("recording %s has %d lost frames in %d places; a gap is not bridged", named(r), lost, len(r.Gaps))
	}
	for c, channel := range r.Channels {
		if channel.Name != output {
			continue
		}
		s := signal{counts: r.Counts[c], count: channel.Count.SI(), tau0S: r.SampleInterval, startS: r.Start, seconds: r.Duration()}
		if output == "angle" {
			s.count /= r.SampleInterval
		}
		if len(s.counts) < samplesLeast {
			return signal{}, fmt.Sprintf("recording %s has %d samples; at least %d are needed", named(r), len(s.counts), samplesLeast)
		}
		return s, ""
	}
	return signal{}, fmt.Sprintf("recording %s has no channel %q", named(r), output)
}

// samplesLeast: below it no figure has a meaning.
const samplesLeast = 8

func named(r *recording.Recording) string {
	if len(r.Labels) == 0 {
		return fmt.Sprintf("%q", r.Name)
	}
	return fmt.Sprintf("%q at %s", r.Name, r.Labels)
}

// mean is the mean in rad/s. The sum is exact: 128 bits hold any sum of int64 counts.
func (s signal) mean() float64 {
	var high, low uint64
	for _, c := range s.counts {
		var carry uint64
		low, carry = bits.Add64(low, uint64(c), 0)
		high, _ = bits.Add64(high, uint64(c>>63), carry)
	}
	negative := int64(high) < 0
	if negative { // the magnitude: a small negative sum has all its upper bits set
		var borrow uint64
		low, borrow = bits.Sub64(0, low, 0)
		high, _ = bits.Sub64(0, high, borrow)
	}
	sum := float64(high)*0x1p64 + float64(low)
	if negative {
		sum = -sum
	}
	return sum / float64(len(s.counts)) * s.count
}

// whiteS is N^2 in rad^2/s, from the shortest averaging time at which quantisation of an angle does not count:
//
//	N^2 = sigma_A^2(tau) tau,  tau = tau0 for rates, 1 s for increments of angle
//
// Flicker's share at such times is below a thousandth for every gyro that is worth a test.
func (s signal) whiteS(output string) float64 {
	m := 1
	if output == "angle" {
		m = max(1, min(len(s.counts)/8, int(math.Round(1/s.tau0S))))
	}
	variance, _ := allanVariance(prefix(s.counts), m)
	return variance * s.count * s.count * float64(m) * s.tau0S
}

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

// input is the mean rate of the table during a recording, about its own axis, in rad/s, with the standard uncertainty
// of reading it.
//
// At rest (below restRate) it is the angle between the first and the last reading of the position over the time between
// them; else the mean of the readings of the rate, whose scatter over the root of their number, ripple of the table
// included, is the uncertainty, and at least that of their resolution. Never the command.
func input(r *recording.Recording) (rate, u float64, reason string) {
	_, values := readings(r, "table.rate")
	if len(values) < 2 {
		return 0, 0, fmt.Sprintf("recording %s has %d readings of table.rate; at least two are needed", named(r), len(values))
	}
	mean, scatter := meanAndScatter(values)
	if math.Abs(mean) >= restRate {
		return mean * degree, math.Max(scatter, resolution(values)) / math.Sqrt(float64(len(values))) * degree, ""
	}
	if creep, u, ok := creepOf(r); ok {
		return creep, u, ""
	}
	return 0, math.Abs(mean)*degree + scatter/math.Sqrt(float64(len(values)))*degree, ""
}

// restRate tells rest from turning, in deg/s, at the table's own reading.
const restRate = 0.01

// creepOf is the rate at position hold from the positions read at both ends.
func creepOf(r *recording.Recording) (rate, u float64, ok bool) {
	at, position := readings(r, "table.position")
	n := len(at)
	if n < 2 || at[n-1] <= at[0] {
		return 0, 0, false
	}
	span := at[n-1] - at[0]
	// Two rounded readings, each uniform over one step of the scale.
	return (position[n-1] - position[0]) / span * degree, math.Sqrt2 * step(position) / math.Sqrt(12) / span * degree, true
}

// step is the smallest difference between readings that differ: the resolution of their scale, at most.
func step(values []float64) float64 {
	least := math.Inf(1)
	for i := 1; i < len(values); i++ {
		if d := math.Abs(values[i] - values[i-1]); d > 1e-9 {
			least = math.Min(least, d)
		}
	}
	if math.IsInf(least, 1) {
		return 1e-5 // deg: a reading that never changed; the finest scale of common encoders
	}
	return least
}

func resolution(values []float64) float64 {
	if d := step(values); d < math.Inf(1) && len(values) > 2 {
		return d / math.Sqrt(12)
	}
	return 0
}

// meanAndScatter are the mean and the sample standard deviation.
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

// earth is the Earth's rate on the gyro's input axis, and the part across it, both in rad/s.
//
//	Omega_n = Omega (n_north cos(lat) + n_up sin(lat)),   Omega_across = sqrt(Omega^2 - Omega_n^2)
//
// A tilt by a small angle toward or away from the Earth's axis changes Omega_n by the angle times Omega_across.
func (b Bench) earth() (along, across float64) {
	along = b.EarthRate + earthRate*(b.AxisNorth*math.Cos(b.Latitude)+b.AxisUp*math.Sin(b.Latitude))
	return along, math.Sqrt(math.Max(earthRate*earthRate-along*along, 0))
}
