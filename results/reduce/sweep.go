package reduce

import (
	"math"
	"slices"

	"proofrate/limits/quantity"
)

// SweepPoint is one rate of a sweep: mean input and mean output over one recording.
type SweepPoint struct {
	Nominal float64 // rad/s: the rate that the procedure names
	Input   float64 // rad/s about the input axis, Earth's rate and polarity in it
	Output  float64 // rad/s at the nominal scale factor
}

// Sweep is a set of points in the order in which they were measured.
type Sweep []SweepPoint

// Line is y = Slope x + Offset.
type Line struct{ Slope, Offset float64 }

// Line is the unweighted least-squares line through all points.
//
//	S = sum (x-xm)(y-ym) / sum (x-xm)^2,   c = ym - S xm
//
// Source: IEEE Std 952-1997, 12.7 (scale factor); the normal equations about the means, as for the StRD sets.
func (s Sweep) Line() Line {
	var xm, ym float64
	for _, p := range s {
		xm += p.Input
		ym += p.Output
	}
	n := float64(len(s))
	xm, ym = xm/n, ym/n
	var sxx, sxy float64
	for _, p := range s {
		sxx += (p.Input - xm) * (p.Input - xm)
		sxy += (p.Input - xm) * (p.Output - ym)
	}
	slope := sxy / sxx
	return Line{slope, ym - slope*xm}
}

// Error is S - 1: the scale factor relative to the nominal one.
func (s Sweep) Error() float64 { return s.Line().Slope - 1 }

// Nonlinearity is max |y - S x - c| over S times full scale, or over |S x| for rates from least up.
// Source: IEEE Std 952-1997, 12.7.4.
func (s Sweep) Nonlinearity(fullScale float64, ofReading bool, least float64) float64 {
	line, most := s.Line(), 0.0
	for _, p := range s {
		part := fullScale
		if ofReading {
			if part = math.Abs(p.Input); part < least || part == 0 {
				continue
			}
		}
		most = math.Max(most, math.Abs(p.Output-line.Slope*p.Input-line.Offset)/(math.Abs(line.Slope)*part))
	}
	return most
}

// Asymmetry is (S+ - S-)/S, the slopes of the points at positive and at negative rates, those at rest in both.
// Source: IEEE Std 952-1997, 12.7.5.
func (s Sweep) Asymmetry() float64 {
	var positive, negative Sweep
	for _, p := range s {
		if p.Nominal >= 0 {
			positive = append(positive, p)
		}
		if p.Nominal <= 0 {
			negative = append(negative, p)
		}
	}
	return (positive.Line().Slope - negative.Line().Slope) / s.Line().Slope
}

// pair is the same nominal rate come to from below and from above, each the indices of its points.
type pair struct{ up, down []int }

// pairs finds the rates of a full traverse that were come to from both sides. The first leg, up to the first turn,
// conditions the gyro and does not count; nor does a turning point, which has no side.
func (s Sweep) pairs() []pair {
	turned := false
	byRate := map[float64]*pair{}
	var order []float64
	for i := 1; i+1 < len(s); i++ {
		before, after := s[i].Nominal-s[i-1].Nominal, s[i+1].Nominal-s[i].Nominal
		if before*after < 0 {
			turned = true
			continue
		}
		if !turned || before == 0 {
			continue
		}
		p := byRate[s[i].Nominal]
		if p == nil {
			p = &pair{}
			byRate[s[i].Nominal] = p
			order = append(order, s[i].Nominal)
		}
		if before > 0 {
			p.up = append(p.up, i)
		} else {
			p.down = append(p.down, i)
		}
	}
	slices.Sort(order)
	var list []pair
	for _, rate := range order {
		if p := byRate[rate]; len(p.up) > 0 && len(p.down) > 0 {
			list = append(list, *p)
		}
	}
	return list
}

// gaps are, for each pair, the difference of its mean residuals from the line, upward less downward.
func (s Sweep) gaps() []float64 {
	line := s.Line()
	mean := func(points []int) float64 {
		sum := 0.0
		for _, i := range points {
			sum += s[i].Output - line.Slope*s[i].Input - line.Offset
		}
		return sum / float64(len(points))
	}
	var list []float64
	for _, p := range s.pairs() {
		list = append(list, mean(p.up)-mean(p.down))
	}
	return list
}

// Hysteresis is max |y_up - y_down| over S times full scale, over equal nominal rates of the full traverse; NaN if
// there is no rate that was come to from both sides. Source: IEEE Std 528 for the term.
func (s Sweep) Hysteresis(fullScale float64) float64 {
	most := math.NaN()
	for _, g := range s.gaps() {
		if !(math.Abs(g) <= most) {
			most = math.Abs(g)
		}
	}
	return most / (math.Abs(s.Line().Slope) * fullScale)
}

// measuredSweep is a sweep with what its points' outputs scatter by.
type measuredSweep struct {
	Sweep
	windows []window
	white   []float64 // variance of each output from white noise, (rad/s)^2
	reading []float64 // of each input, from reading the table
	slow    coefficients
	bench   Bench
	gyro    Gyro
	seed    uint64
}

// window is when a recording was made.
type window struct{ startS, lengthS float64 }

// sweepOf reduces an element's recordings to a sweep.
func sweepOf(in Input) (*measuredSweep, string) {
	m := &measuredSweep{bench: in.Bench, gyro: in.Gyro, seed: in.Seed}
	along, _ := in.Bench.earth()
	for _, r := range in.Recordings {
		s, reason := signalOf(r, in.Gyro.Output)
		if reason != "" {
			return nil, reason
		}
		x, u, reason := input(r)
		if reason != "" {
			return nil, reason
		}
		x *= 1 + in.Bench.TableRate.Correction
		label, ok := r.Labels.Find("rate")
		if !ok {
			return nil, "recording " + named(r) + " has no label rate"
		}
		sense := in.Bench.Sense
		m.Sweep = append(m.Sweep, SweepPoint{Nominal: in.Gyro.Polarity * sense * label.Value.SI(),
			Input: in.Gyro.Polarity * (sense*x + along), Output: s.mean()})
		m.windows = append(m.windows, window{s.startS, s.seconds})
		m.white = append(m.white, s.seconds) // the length for now
		m.reading = append(m.reading, u*u)
	}
	if reason := m.noise(in); reason != "" {
		return nil, reason
	}
	low, high := m.Sweep[0].Input, m.Sweep[0].Input
	for _, p := range m.Sweep {
		low, high = math.Min(low, p.Input), math.Max(high, p.Input)
	}
	if (high-low)/degree < restRate {
		return nil, "the table did not turn at different rates"
	}
	return m, ""
}

// noise takes white and slow noise from a recording at rest: while the table turns, its ripple would be mistaken for
// the gyro's noise.
func (m *measuredSweep) noise(in Input) string {
	if len(in.Noise) == 0 {
		return "no recording at rest tells the gyro's noise"
	}
	s, reason := signalOf(in.Noise[0], in.Gyro.Output)
	if reason != "" {
		return reason
	}
	fit, reason := fitNoise(s, in.Gyro.Output)
	if fit == nil {
		return reason
	}
	m.slow = coefficients{termB: fit.got[termB], termK: fit.got[termK]}
	white := s.whiteS(in.Gyro.Output)
	for i, length := range m.white {
		m.white[i] = white / length
	}
	return ""
}

// covariance of the points' outputs, in (rad/s)^2: white noise and reading on the diagonal, slow noise between windows,
// and the centripetal acceleration at the slot's radius, r w^2, through the declared sensitivity.
func (m *measuredSweep) covariance() [][]float64 {
	n := len(m.Sweep)
	slow := m.slow.windows(m.windows)
	c := make([][]float64, n)
	g := m.gyro.AccelerationSensitivity * m.bench.Radius
	for i := range c {
		c[i] = make([]float64, n)
		for j := range c[i] {
			wi, wj := m.Sweep[i].Input, m.Sweep[j].Input
			c[i][j] = slow[i][j] + g*g*wi*wi*wj*wj
		}
		c[i][i] += m.white[i] + m.reading[i]
	}
	return c
}

// parts is the budget of a linear figure f = sum g_i y_i: each source by its own covariance.
func (m *measuredSweep) parts(g []float64) []quantity.Line {
	slow := m.slow.windows(m.windows)
	var white, reading, flicker, centripetal float64
	for i := range g {
		white += g[i] * g[i] * m.white[i]
		reading += g[i] * g[i] * m.reading[i]
		centripetal += g[i] * m.Sweep[i].Input * m.Sweep[i].Input
		for j := range g {
			flicker += g[i] * g[j] * slow[i][j]
		}
	}
	centripetal *= m.gyro.AccelerationSensitivity * m.bench.Radius
	line := func(name string, u float64) quantity.Line {
		return quantity.Line{Name: name, U: u, Sensitivity: 1, Contribution: u, DoF: math.Inf(1)}
	}
	return present([]quantity.Line{line("white noise", math.Sqrt(white)), line("reading of the table's rate", math.Sqrt(reading)),
		line("slow noise", math.Sqrt(math.Max(flicker, 0))), line("centripetal acceleration", math.Abs(centripetal))})
}

// gradient of a figure by the outputs, by central differences: the figures are smooth in them.
func (m *measuredSweep) gradient(figure func(Sweep) float64) []float64 {
	step := 1e-6 * m.gyro.Range
	g := make([]float64, len(m.Sweep))
	for i := range g {
		moved := slices.Clone(m.Sweep)
		moved[i].Output += step
		up := figure(moved)
		moved[i].Output -= 2 * step
		g[i] = (up - figure(moved)) / (2 * step)
	}
	return g
}
