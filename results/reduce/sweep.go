package reduce

import (
	"cmp"
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"

	"proofrate/limits/quantity"
)

// measuredSweep is a sweep with what its points' outputs scatter by.
type measuredSweep struct {
	Sweep
	white         []float64      // standard uncertainty of each output from white noise and rounding, rad/s
	reading       []float64      // of each input, from reading the table
	flicker, walk [][]float64    // covariance of the outputs for B = 1 rad/s and for K = 1 rad/s/sqrt(s)
	slow          []coefficients // what is believed of B and K
	centripetal   float64        // s: output from the acceleration at the slot's radius is this times the rate squared
	bench         Bench
	gyro          Gyro
}

// window is when a recording was made.
type window struct{ startS, lengthS float64 }

// slowDraws carry what is believed of the slow noise.
const slowDraws = 500

// sweepOf reduces an element's recordings to a sweep. White and slow noise are taken from a recording at rest: while the
// table turns, its ripple would be mistaken for the gyro's noise. The Earth's rate is a constant part of every input.
func sweepOf(in Input) (*measuredSweep, string) {
	if len(in.Noise) == 0 {
		return nil, "no recording at rest tells the gyro's noise"
	}
	rest, reason := signalOf(in.Noise[0], in.Gyro.Output)
	if reason != "" {
		return nil, reason
	}
	fit, reason := fitNoise(rest)
	if fit == nil {
		return nil, reason
	}
	square, _ := rest.white()
	m := &measuredSweep{bench: in.Bench, gyro: in.Gyro, centripetal: in.Gyro.AccelerationSensitivity * in.Bench.Radius}
	along, _ := in.Bench.earth()
	var windows []window
	for _, r := range in.Recordings {
		s, reason := signalOf(r, in.Gyro.Output)
		if reason != "" {
			return nil, reason
		}
		x, u, reason := input(r)
		if reason != "" {
			return nil, reason
		}
		label, ok := r.Labels.Find("rate")
		if !ok {
			return nil, "recording " + named(r) + " has no label rate"
		}
		sense := in.Bench.Sense
		m.Sweep = append(m.Sweep, SweepPoint{Nominal: in.Gyro.Polarity * sense * label.Value.SI(),
			Input: in.Gyro.Polarity * (sense*x*(1+in.Bench.TableRate.Correction) + along), Output: s.mean()})
		m.white = append(m.white, math.Hypot(math.Sqrt(square/s.seconds), s.rounding(square)))
		m.reading = append(m.reading, u)
		windows = append(windows, window{s.startS, s.seconds})
	}
	low, high := m.Sweep[0].Input, m.Sweep[0].Input
	for _, p := range m.Sweep {
		low, high = math.Min(low, p.Input), math.Max(high, p.Input)
	}
	if (high-low)/degree < restRate {
		return nil, "the table did not turn at different rates"
	}
	m.flicker = coefficients{termB: 1}.windows(windows)
	m.walk = coefficients{termK: 1}.windows(windows)
	m.slow = fit.believe().draws(in.Seed, slowDraws)
	return m, ""
}

// parts is the budget of a figure that is linear in the outputs, f = sum g_i y_i: each source by its own covariance.
//
// The slow noise's part is the median over what is believed of B and K, with the degrees of freedom that its spread
// stands for, 1/(2 (u(u)/u)^2). Source: JCGM 100:2008, G.4.2.
func (m *measuredSweep) parts(g []float64) []quantity.Line {
	var white, reading, centripetal float64
	for i := range g {
		white += g[i] * g[i] * m.white[i] * m.white[i]
		reading += g[i] * g[i] * m.reading[i] * m.reading[i]
		centripetal += g[i] * m.Sweep[i].Input * m.Sweep[i].Input
	}
	slow, spread, _ := m.slowOf(m.slowVariance(g))
	line := func(name string, u, dof float64) quantity.Line {
		return quantity.Line{Name: name, U: u, Sensitivity: 1, Contribution: u, DoF: dof}
	}
	return present([]quantity.Line{line("white noise", math.Sqrt(white), math.Inf(1)), line("reading of the table's rate", math.Sqrt(reading), math.Inf(1)),
		line("slow noise", slow, slow*slow/(2*spread*spread)), line("centripetal acceleration", math.Abs(centripetal*m.centripetal), math.Inf(1))})
}

// slowOf is the standard uncertainty from slow noise of something whose variance is flicker B^2 + walk K^2: the median of
// what is believed, half the width of the middle 68 %, and the B and K that make the median.
func (m *measuredSweep) slowOf(flicker, walk float64) (u, spread float64, c coefficients) {
	of := func(c coefficients) float64 { return math.Sqrt(math.Max(c[termB]*flicker+c[termK]*walk, 0)) }
	sorted := slices.Clone(m.slow)
	slices.SortStableFunc(sorted, func(a, b coefficients) int { return cmp.Compare(of(a), of(b)) })
	n := len(sorted)
	return of(sorted[n/2]), (of(sorted[n*84/100]) - of(sorted[n*16/100])) / 2, sorted[n/2]
}

// slowVariance are the factors of B^2 and K^2 in the variance of sum g_i y_i.
func (m *measuredSweep) slowVariance(g []float64) (flicker, walk float64) {
	for i := range g {
		for j := range g {
			flicker += g[i] * g[j] * m.flicker[i][j]
			walk += g[i] * g[j] * m.walk[i][j]
		}
	}
	return flicker, walk
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

// noiseOf draws what the sources make of residuals that are zero, with the B and K that are the median for the residual
// whose gradient by the outputs is g.
func (m *measuredSweep) noiseOf(residuals func(Sweep) []float64, g []float64, random *rand.Rand) [][]float64 {
	_, _, c := m.slowOf(m.slowVariance(g))
	b, k := math.Sqrt(c[termB]), math.Sqrt(c[termK])
	n := len(m.Sweep)
	flicker, walk := factor(m.flicker), factor(m.walk)
	line := m.Line()
	straight := slices.Clone(m.Sweep)
	zB, zK := make([]float64, n), make([]float64, n)
	list := make([][]float64, largestDraws)
	for d := range list {
		centripetal := m.centripetal * random.NormFloat64()
		for i := range n {
			zB[i], zK[i] = b*random.NormFloat64(), k*random.NormFloat64()
		}
		for i := range n {
			x := m.Sweep[i].Input
			e := m.white[i]*random.NormFloat64() + m.reading[i]*random.NormFloat64() + centripetal*x*x
			for j := range i + 1 {
				e += flicker[i][j]*zB[j] + walk[i][j]*zK[j]
			}
			straight[i].Output = line.Slope*x + line.Offset + e
		}
		list[d] = residuals(straight)
	}
	return list
}

// factor is the Cholesky factor of a covariance, with as much on its diagonal as rounding asks for.
func factor(c [][]float64) [][]float64 {
	n := len(c)
	for jitter := 1e-12; ; jitter *= 10 {
		sym := mat.NewSymDense(n, nil)
		for i := range n {
			for j := i; j < n; j++ {
				sym.SetSym(i, j, c[i][j])
			}
			sym.SetSym(i, i, c[i][i]*(1+jitter))
		}
		var cholesky mat.Cholesky
		if !cholesky.Factorize(sym) {
			continue
		}
		var lower mat.TriDense
		cholesky.LTo(&lower)
		rows := make([][]float64, n)
		for i := range rows {
			for j := range i + 1 {
				rows[i] = append(rows[i], lower.At(i, j))
			}
		}
		return rows
	}
}
