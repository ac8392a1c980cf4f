package reduce

import (
	"context"
	"math"
	"slices"

	"proofrate/limits/quantity"
)

// refitCount draws carry the distribution of what is read off a fitted curve.
const refitCount = 1000

// biasInstability is the lowest point of the fitted Allan curve over the grid of averaging times, over 0.664.
//
//	B_i = min_tau sqrt(3 Q^2/tau^2 + N^2/tau + (2 ln 2/pi) B^2 + K^2 tau/3) / sqrt(2 ln 2/pi)
//
// The minimum of the fitted curve, since the lowest of many noisy points is biased low. Its distribution: the curve is
// fitted anew to variances drawn under the fitted noise, and what the fit makes of its own truth is undone. If the
// minimum lies at the end of the grid, of the fit or of more than a fortieth of those fitted anew, averaging longer might
// have gone lower and the figure is an upper bound.
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
	lowest := func(c coefficients) (float64, int) {
		least, at := math.Inf(1), 0
		for i, tau := range f.tauS {
			if v := c.variance(tau); v < least {
				least, at = v, i
			}
		}
		return math.Sqrt(least) / scale, at
	}
	end := len(f.tauS) - 1
	value, at := lowest(f.got)
	ends := 0
	for _, c := range f.refits(in.Seed, refitCount) {
		if _, at := lowest(c); at == end {
			ends++
		}
	}
	if at == end || ends > refitCount/40 {
		// The fit's own spread does not tell how much of a term it may have missed; the longest averaging time does.
		return f.upper(value, 1/scale, end, radPerS)
	}
	return f.ratioDistribution(in.Seed, value, radPerS, "Allan variances", func(c coefficients) float64 { v, _ := lowest(c); return v })
}

// fitOf fits the noise of an input's one recording.
func fitOf(in Input) (*noiseFit, string) {
	s, reason := signalOf(in.Recordings[0], in.Gyro.Output)
	if reason != "" {
		return nil, reason
	}
	return fitNoise(s, in.Gyro.Output)
}

// ratioDistribution is the distribution of a positive quantity read off the fit: if the fit makes r times the truth of
// noise whose truth is known, the truth behind value is value/r.
func (f *noiseFit) ratioDistribution(seed uint64, value float64, unit quantity.Unit, name string, read func(coefficients) float64) quantity.Measured {
	draws := make([]float64, 0, refitCount)
	for _, c := range f.refits(seed, refitCount) {
		if r := read(c) / value; r > 0 {
			draws = append(draws, value/r)
		}
	}
	if len(draws) < refitCount/2 {
		return quantity.Voided(unit, "the recording does not determine it")
	}
	slices.Sort(draws)
	m := quantity.Sample(draws, draws[len(draws)/2], unit, nil)
	m.Budget = []quantity.Line{{Name: name, Value: value, U: m.U, Sensitivity: 1, Contribution: m.U, DoF: math.Inf(1)}}
	return m
}

// coefficient makes the method of one noise coefficient.
//
// A coefficient that cannot be told from zero, that is one that the fit puts at zero in more than a fortieth of the
// draws, is an upper bound: what the longest (K, B) or shortest (Q) averaging time alone allows, since every term of
// the variance there is positive:
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
		for _, c := range f.refits(in.Seed, refitCount) {
			if c[term] == 0 {
				zeros++
			}
		}
		if value == 0 || zeros > refitCount/40 {
			return f.bound(term, value, unit)
		}
		return f.ratioDistribution(in.Seed, value, unit, "Allan variances", func(c coefficients) float64 { return math.Sqrt(c[term]) })
	}
}

// bound is the upper bound of a coefficient that was not detected.
func (f *noiseFit) bound(term int, value float64, unit quantity.Unit) quantity.Measured {
	at := len(f.tauS) - 1
	if term == termQ {
		at = 0
	}
	return f.upper(value, 1/math.Sqrt(column(f.tauS[at])[term]), at, unit)
}

// upper is the bound that one averaging time allows: scale times the chi-square bound of its deviation.
func (f *noiseFit) upper(value, scale float64, at int, unit quantity.Unit) quantity.Measured {
	chi := quantity.Chi(math.Sqrt(f.variance[at]), 0, f.dof[at], unit, nil)
	high := chi.Quantile(0.95) * scale
	u := high / 1.959963984540054 // so that half a normal distribution holds 95 % below high
	return quantity.Measured{Value: value, U: u, DoF: math.Inf(1), Low: 0, High: high, Unit: unit, Family: quantity.Bound, Upper: true,
		Budget: []quantity.Line{{Name: "Allan variance at " + quantity.FromSI(f.tauS[at], quantity.MustUnit("s")).String(), U: u, Sensitivity: 1, Contribution: u, DoF: math.Inf(1)}}}
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
	f, reason := fitNoise(s, in.Gyro.Output)
	if f == nil {
		return quantity.Voided(radPerS, reason)
	}
	variance, _ := allanVariance(prefix(s.counts), m)
	deviation := math.Sqrt(variance) * s.count
	// The fit's grid holds the averaging time or one within a seventh of it; the degrees of freedom follow 1/tau.
	dof := f.dof[0]
	for i, tau := range f.tauS {
		if tau <= in.Options.Tau*1.0001 {
			dof = f.dof[i] * tau / in.Options.Tau
		}
	}
	return quantity.Chi(deviation, 0, math.Max(dof, 1), radPerS, nil)
}
