package reduce

import (
	"context"
	"math"
	"math/rand/v2"
	"slices"
	"sort"

	"gonum.org/v1/gonum/stat/distuv"

	"proofrate/limits/quantity"
)

func nonlinearity(_ context.Context, in Input) quantity.Measured {
	ofReading := in.Options.Relative == "reading"
	return largest(in, false, "no rate is as large as the least that counts", func(s Sweep) []float64 {
		return s.relativeResiduals(in.Gyro.Range, ofReading, in.Options.Least)
	})
}

func hysteresis(_ context.Context, in Input) quantity.Measured {
	return largest(in, true, "no rate was come to from both sides; a full traverse is needed (0, +, 0, -, 0, +)", func(s Sweep) []float64 {
		return s.relativeGaps(in.Gyro.Range)
	})
}

const (
	largestDraws  = 1000
	largestSteps  = 80
	largestStream = 0x6c617267657374 // "largest"
)

// largest measures a figure that is the largest of several noisy residuals, and so biased high.
//
// m = max |r_i| was measured of residuals r = t + e, t their true values and e noise, normal with the covariance that the
// budget's sources give them, and what is wanted is x = max |t_i|. The true values that are nearest to the measured ones
// and have the largest x are those measured, cut off at x (and, where x is beyond m, the largest raised to it): t(x).
// With M(x) = max |t(x) + e|,
//
//	P(truth <= x) = P(M(x) >= m),   value: P(M(value) >= m) = 1/2
//
// is exact for one residual; for several it takes off what noise alone makes of the largest. The standard uncertainty is
// the spread of the value over M(value). If noise alone makes m in more than a fortieth of the draws, the figure is an
// upper bound, and its uncertainty the spread that noise alone makes.
//
// Draws are of vectors e, never of samples; their stream comes from the seed.
func largest(in Input, alike bool, nothing string, residuals func(Sweep) []float64) quantity.Measured {
	m, reason := sweepOf(in)
	if m == nil {
		return quantity.Voided(ratio, reason)
	}
	measured := residuals(m.Sweep)
	if len(measured) == 0 {
		return quantity.Voided(ratio, nothing)
	}
	top, at := maximum(measured)
	g := m.gradient(func(s Sweep) float64 { return residuals(s)[at] })
	b := behind{measured: measured, top: top, at: at, noise: m.noiseOf(residuals, g, rand.New(rand.NewPCG(in.Seed, largestStream)))}
	b.shape, b.size = measured, top
	if alike {
		b.shrink()
	}
	b.explore()
	parts := m.parts(g)
	value := b.value(top)
	result := quantity.Sample(widened(b.quantiles(), value, quantity.T(0, ratio, parts).DoF), value, ratio, nil)
	result.U = b.spread(value)
	if b.x[0] == 0 && b.exceeds[0] > 1.0/40 {
		result.Family, result.Upper, result.U = quantity.Bound, true, b.spread(0)
		result.Low, result.High = result.Interval(0.95)
	}
	result.Budget = []quantity.Line{{Name: "largest residual as measured", Value: top, DoF: math.Inf(1)}, {Name: "largest that noise alone makes", Value: b.alone, DoF: math.Inf(1)}}
	result.Budget = append(result.Budget, shares(parts, result.U)...)
	return result
}

// widened moves quantiles away from the value as Student's distribution of so many degrees of freedom is wider than the
// normal one: the noise that was drawn is itself known only as well as that.
func widened(quantiles []float64, value, dof float64) []float64 {
	if math.IsInf(dof, 1) {
		return quantiles
	}
	student := distuv.StudentsT{Sigma: 1, Nu: dof}
	for i, q := range quantiles {
		p := (float64(i) + 0.5) / float64(len(quantiles))
		if z := distuv.UnitNormal.Quantile(p); math.Abs(z) > 1e-3 {
			quantiles[i] = math.Max(0, value+(q-value)*student.Quantile(p)/z)
		}
	}
	return quantiles
}

// shares are the sources' parts of an uncertainty u, as they share in the variance of the largest residual.
func shares(lines []quantity.Line, u float64) []quantity.Line {
	total := 0.0
	for _, l := range lines {
		total = math.Hypot(total, l.Contribution)
	}
	for i := range lines {
		lines[i].Contribution *= u / total
		lines[i].Sensitivity = u / total
	}
	return lines
}

func maximum(list []float64) (top float64, at int) {
	for i, x := range list {
		if math.Abs(x) > top {
			top, at = math.Abs(x), i
		}
	}
	return top, at
}

// behind looks for the largest true residual behind a measured one, on a grid of x from as low as noise may have lifted it.
type behind struct {
	measured []float64
	top      float64 // the largest of them, and its place
	at       int
	noise    [][]float64
	shape    []float64 // the measured ones, shrunk; and the largest of them
	size     float64
	x        []float64
	exceeds  []float64 // P(M(x) >= top), rising
	typical  []float64 // median of M(x), rising
	alone    float64   // the mean of M(0)
}

// shrink moves the sizes of the measured residuals toward their mean, as far as noise makes them differ. It suits what is
// alike, as the gaps of one hysteresis are; the residuals of a bent line are not.
//
//	|t_i| = a + max(0, 1 - (n-3) s^2 / sum (|r_i| - a)^2) (|r_i| - a)
//
// a their mean, s^2 the mean variance of the noise. Source: Efron and Morris, JASA 70 (1975) 311.
func (b *behind) shrink() {
	n := float64(len(b.measured))
	var mean, square, noise float64
	for _, r := range b.measured {
		mean += math.Abs(r) / n
	}
	for _, r := range b.measured {
		square += (math.Abs(r) - mean) * (math.Abs(r) - mean)
	}
	for _, e := range b.noise {
		for _, x := range e {
			noise += x * x / n / float64(len(b.noise))
		}
	}
	keep := 1.0
	if n > 3 {
		keep = math.Max(0, 1-(n-3)*noise/square)
	}
	b.shape, b.size = nil, 0
	for _, r := range b.measured {
		size := mean + keep*(math.Abs(r)-mean)
		b.shape = append(b.shape, math.Copysign(size, r))
		b.size = math.Max(b.size, size)
	}
}

// largestFor gives draws of M(x).
func (b *behind) largestFor(x float64) []float64 {
	truth := make([]float64, len(b.shape))
	for i, t := range b.shape {
		truth[i] = math.Max(-x, math.Min(x, t))
		if x > b.size {
			truth[i] = t * x / b.size
		}
	}
	list := make([]float64, len(b.noise))
	for d, e := range b.noise {
		most := 0.0
		for i, t := range truth {
			most = math.Max(most, math.Abs(t+e[i]))
		}
		list[d] = most
	}
	return list
}

func (b *behind) explore() {
	alone := b.largestFor(0)
	widest := slices.Max(alone)
	start, end := math.Max(0, b.top-2*widest), b.top+1.5*widest
	b.alone, _ = meanAndScatter(alone)
	var before, typical float64
	for i := range largestSteps + 1 {
		x := start + (end-start)*float64(i)/largestSteps
		list := b.largestFor(x)
		n := 0
		for _, m := range list {
			if m >= b.top {
				n++
			}
		}
		slices.Sort(list)
		before = math.Max(before, float64(n)/float64(len(list)))
		typical = math.Max(typical, list[len(list)/2])
		b.x, b.exceeds, b.typical = append(b.x, x), append(b.exceeds, before), append(b.typical, typical)
	}
}

// quantiles of the truth's distribution, at (k+1/2)/largestDraws.
//
// Above the median they are at least those of the one largest residual by itself, m + z_p s: which residual is truly the
// largest is not known, but it was measured as no more than m, whatever the others are.
func (b *behind) quantiles() []float64 {
	var square float64
	for _, e := range b.noise {
		square += e[b.at] * e[b.at] / float64(len(b.noise))
	}
	s := math.Sqrt(square)
	draws := make([]float64, largestDraws)
	for k := range draws {
		p := (float64(k) + 0.5) / largestDraws
		draws[k] = lookup(b.exceeds, b.x, p)
		if p > 0.5 {
			draws[k] = math.Max(draws[k], b.top+s*distuv.UnitNormal.Quantile(p))
		}
	}
	return draws
}

// value is the x whose M(x) is typically as large as m.
func (b *behind) value(m float64) float64 { return lookup(b.typical, b.x, m) }

// spread is the standard deviation of the value over M(x).
func (b *behind) spread(x float64) float64 {
	list := b.largestFor(x)
	for i, m := range list {
		list[i] = b.value(m)
	}
	_, scatter := meanAndScatter(list)
	return scatter
}

// lookup inverts a rising function by straight lines between its points: 0 below the first, the end beyond the last.
func lookup(rising, x []float64, y float64) float64 {
	i := sort.SearchFloat64s(rising, y)
	switch {
	case i == 0:
		return x[0]
	case i == len(x):
		return x[len(x)-1]
	}
	return x[i-1] + (x[i]-x[i-1])*(y-rising[i-1])/(rising[i]-rising[i-1])
}
