package reduce

import (
	"context"
	"math"
	"math/rand/v2"
	"slices"
	"sort"

	"proofrate/limits/quantity"
)

func nonlinearity(_ context.Context, in Input) quantity.Measured {
	ofReading := in.Options.Relative == "reading"
	return largest(in, "no rate is as large as the least that counts", func(s Sweep) []float64 {
		return s.relativeResiduals(in.Gyro.Range, ofReading, in.Options.Least)
	})
}

func hysteresis(_ context.Context, in Input) quantity.Measured {
	return largest(in, "no rate was come to from both sides; a full traverse is needed (0, +, 0, -, 0, +)", func(s Sweep) []float64 {
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
func largest(in Input, nothing string, residuals func(Sweep) []float64) quantity.Measured {
	m, reason := sweepOf(in)
	if m == nil {
		return quantity.Voided(ratio, reason)
	}
	measured := residuals(m.Sweep)
	if len(measured) == 0 {
		return quantity.Voided(ratio, nothing)
	}
	top, at := maximum(measured)
	b := behind{measured: measured, top: top, at: at, noise: m.noiseOf(residuals, rand.New(rand.NewPCG(in.Seed, largestStream)))}
	b.explore()
	draws := b.quantiles()
	value := b.value(top)
	result := quantity.Sample(draws, value, ratio, nil)
	result.U = b.spread(value)
	if b.x[0] == 0 && b.exceeds[0] > 1.0/40 {
		result.Family, result.Upper, result.U = quantity.Bound, true, b.spread(0)
		result.Low, result.High = result.Interval(0.95)
	}
	result.Budget = []quantity.Line{{Name: "largest residual as measured", Value: top, DoF: math.Inf(1)}, {Name: "largest that noise alone makes", Value: b.alone, DoF: math.Inf(1)}}
	result.Budget = append(result.Budget, m.shares(m.gradient(func(s Sweep) float64 { return residuals(s)[at] }), result.U)...)
	return result
}

// shares are the sources' parts of an uncertainty u, as they share in the variance of the largest residual.
func (m *measuredSweep) shares(g []float64, u float64) []quantity.Line {
	lines := m.parts(g)
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
	top      float64 // the largest of them, and its index
	at       int
	noise    [][]float64
	x        []float64
	exceeds  []float64 // P(M(x) >= top), rising
	typical  []float64 // median of M(x), rising
	alone    float64   // the mean of M(0)
}

// largestFor gives draws of M(x).
func (b *behind) largestFor(x float64) []float64 {
	truth := make([]float64, len(b.measured))
	for i, r := range b.measured {
		truth[i] = math.Max(-x, math.Min(x, r))
	}
	truth[b.at] = math.Copysign(x, b.measured[b.at])
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
func (b *behind) quantiles() []float64 {
	draws := make([]float64, largestDraws)
	for k := range draws {
		draws[k] = lookup(b.exceeds, b.x, (float64(k)+0.5)/largestDraws)
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
