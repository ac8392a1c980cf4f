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
	angle   bool    // counts are increments of angle
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
			s.angle = true
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

// white is the white noise of a recording, as its own samples show it: N^2 in rad^2/s, with its degrees of freedom.
//
//	N^2 = sigma_A^2(tau) tau,  tau = tau0 for rates, 1 s for increments of angle, whose quantisation is gone by then
//
// For rates that is N_eff: rounding adds count^2 tau0/12. Flicker's share at such times, (0.664 B)^2 tau, is below a
// hundredth of N^2 for every gyro whose white noise reaches beyond 100 s.
func (s signal) white() (square, dof float64) {
	m := 1
	if s.angle {
		m = max(1, min(len(s.counts)/8, int(math.Round(1/s.tau0S))))
	}
	return allanVarianceSparse(prefix(s.counts), m) * s.count * s.count * float64(m) * s.tau0S, whiteDoF(len(s.counts), m)
}

// rounding is the standard uncertainty of the mean from counts being whole.
//
// Increments of angle carry their remainder: only those at both ends remain, count/sqrt(6) over the time. Rates are
// rounded each by itself: noise of a standard deviation s well above a count makes that random, and part of the white
// noise; what it leaves of the offset dies away as exp(-2 pi^2 (s/count)^2), and without noise it is count/sqrt(12), a
// dead band. Source: the first term of the Fourier series of the rounding error of a normal variable.
func (s signal) rounding(white float64) float64 {
	if s.angle {
		return s.count * s.tau0S / math.Sqrt(6) / s.seconds
	}
	ratio := white / s.tau0S / (s.count * s.count)
	return s.count / math.Sqrt(12) * math.Exp(-2*math.Pi*math.Pi*math.Max(ratio-1.0/12, 0))
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
