package reduce

import (
	"context"
	"math"
	"slices"

	"proofrate/limits/quantity"
)

// drawCount draws carry the distribution of what is read off a fitted curve.
const drawCount = 2000

// biasInstability is the lowest point of the fitted Allan curve over the grid of averaging times, over 0.664.
//
//	B_i = min_tau sqrt(3 Q^2/tau^2 + N^2/tau + (2 ln 2/pi) B^2 + K^2 tau/3) / sqrt(2 ln 2/pi)
//
// The minimum of the fitted curve, since the lowest of many noisy points is biased low. Its distribution is that of the
// curve, see belief. If the minimum lies at the end of the grid, or may well do so, averaging longer might have gone
// lower and the figure is an upper bound.
// Source: IEEE Std 952-1997, annex C, C.1.3.
func biasInstability(_ context.Context, in Input) quantity.Measured {
	f, reason := fitOf(in)
	if f == nil {
		return quantity.Voided(radPerS, reason)
	}
	scale := math.Sqrt(flickerPlateau)
	if in.Options.Unscaled {
		scale = 1
	}
	lowest := func(c coefficients) (value float64, atEnd bool) {
		least := math.Inf(1)
		for i, tau := range f.tauS {
			if v := c.variance(tau); v < least {
				least, atEnd = v, i == len(f.tauS)-1
			}
		}
		return math.Sqrt(least) / scale, atEnd
	}
	value, atEnd := lowest(f.got)
	draws := f.believe().draws(in.Seed, drawCount)
	values := make([]float64, len(draws))
	ends := 0
	for i, c := range draws {
		var end bool
		if values[i], end = lowest(c); end {
			ends++
		}
	}
	return believed(value, values, radPerS, atEnd || ends > len(draws)/40)
}

// believed is a fitted value with the distribution that is believed of it; of an upper bound, the interval reaches from
// zero to its quantile at 0.95.
func believed(value float64, draws []float64, unit quantity.Unit, bound bool) quantity.Measured {
	m := quantity.Sample(draws, value, unit, nil)
	m.Budget = []quantity.Line{{Name: "Allan variances", Value: value, U: m.U, Sensitivity: 1, Contribution: m.U, DoF: math.Inf(1)}}
	if bound {
		m.Family, m.Upper = quantity.Bound, true
		m.Low, m.High = m.Interval(0.95)
	}
	return m
}

// fitOf fits the noise of an input's one recording.
func fitOf(in Input) (*noiseFit, string) {
	s, reason := signalOf(in.Recordings[0], in.Gyro.Output)
	if reason != "" {
		return nil, reason
	}
	return fitNoise(s)
}

// ratioDistribution is the distribution of a positive quantity read off the fit: if the fit makes r times the truth of
// noise whose truth is known, the truth behind value is value/r.
func (f *noiseFit) ratioDistribution(seed uint64, value float64, unit quantity.Unit, name string, read func(coefficients) float64) quantity.Measured {
	draws := make([]float64, 0, drawCount)
	for _, c := range f.refits(seed, drawCount) {
		if r := read(c) / value; r > 0 {
			draws = append(draws, value/r)
		}
	}
	if len(draws) < drawCount/2 {
		return quantity.Voided(unit, "the recording does not determine it")
	}
	slices.Sort(draws)
	m := quantity.Sample(draws, draws[len(draws)/2], unit, nil)
	m.Budget = []quantity.Line{{Name: name, Value: value, U: m.U, Sensitivity: 1, Contribution: m.U, DoF: math.Inf(1)}}
	return m
}

// rateRandomWalk is K, fitted to the Allan curve. One that the likelihood does not tell from zero is an upper bound.
// Source: IEEE Std 952-1997, annex C.
func rateRandomWalk(_ context.Context, in Input) quantity.Measured {
	f, reason := fitOf(in)
	if f == nil {
		return quantity.Voided(rateWalk, reason)
	}
	b := f.believe()
	draws := b.draws(in.Seed, drawCount)
	values := make([]float64, len(draws))
	for i, c := range draws {
		values[i] = math.Sqrt(c[termK])
	}
	return believed(math.Sqrt(f.got[termK]), values, rateWalk, !b.hasWalk)
}

// coefficient makes the method of a coefficient that the short averaging times determine: N, or Q.
//
// One that cannot be told from zero, that is one that the fit puts at zero in more than a fortieth of the draws, is an
// upper bound: what the shortest averaging time alone allows, since every term of the variance there is positive:
//
//	c^2 column_c(tau) <= sigma^2(tau) <= s^2(tau) edf / chi2_0.05(edf)
//
// Source: IEEE Std 952-1997, annex C.
func coefficient(term int, unit quantity.Unit) func(context.Context, Input) quantity.Measured {
	return func(_ context.Context, in Input) quantity.Measured {
		f, reason := fitOf(in)
		if f == nil {
			return quantity.Voided(unit, reason)
		}
		value := math.Sqrt(f.got[term])
		zeros := 0
		for _, c := range f.refits(in.Seed, drawCount) {
			if c[term] == 0 {
				zeros++
			}
		}
		if value == 0 || zeros > drawCount/40 {
			return f.bound(term, value, unit)
		}
		return f.ratioDistribution(in.Seed, value, unit, "Allan variances", func(c coefficients) float64 { return math.Sqrt(c[term]) })
	}
}

// bound is the upper bound of a coefficient that was not detected.
func (f *noiseFit) bound(term int, value float64, unit quantity.Unit) quantity.Measured {
	chi := quantity.Chi(math.Sqrt(f.variance[0]), 0, f.dof[0], radPerS, nil)
	high := chi.Quantile(0.95) / math.Sqrt(column(f.tauS[0])[term])
	u := high / 1.959963984540054 // so that half a normal distribution holds 95 % below high
	return quantity.Measured{Value: value, U: u, DoF: math.Inf(1), Low: 0, High: high, Unit: unit, Family: quantity.Bound, Upper: true,
		Budget: []quantity.Line{{Name: "Allan variance at " + quantity.FromSI(f.tauS[0], quantity.MustUnit("s")).String(), U: u, Sensitivity: 1, Contribution: u, DoF: math.Inf(1)}}}
}

// allanDeviation is the overlapping Allan deviation at one averaging time, with the chi-square interval of its degrees
// of freedom under the fitted noise.
// Source: IEEE Std 952-1997, annex C; NIST SP 1065, 5.2.4 and 5.3.
func allanDeviation(_ context.Context, in Input) quantity.Measured {
	s, reason := signalOf(in.Recordings[0], in.Gyro.Output)
	if reason != "" {
		return quantity.Voided(radPerS, reason)
	}
	m := int(math.Round(in.Options.Tau / s.tau0S))
	if m < 1 || 3*m > len(s.counts) {
		return quantity.Voided(radPerS, "the averaging time is below the sample interval or beyond a third of the recording")
	}
	f, reason := fitNoise(s)
	if f == nil {
		return quantity.Voided(radPerS, reason)
	}
	variance, _ := allanVariance(prefix(s.counts), m)
	products := f.got.products()
	each := variances(len(s.counts), m, s.tau0S)
	expected := f.got.variance(float64(m) * s.tau0S)
	return quantity.Chi(math.Sqrt(variance)*s.count, 0, 2*expected*expected/dot(&products, &each), radPerS, nil)
}
