package reduce

import (
	"context"
	"math"

	"gonum.org/v1/gonum/mathext"

	"proofrate/limits/quantity"
)

// repeatability is the scatter of the mean output over turn-ons, in-run white noise removed.
//
//	s^2 = sum (m_i - m)^2/(n-1),   w^2 = mean of N^2/T over the recordings,   value^2 = max(s^2 - w^2, 0)
//
// population: the gyro's own scatter. Chi-square with n-1 degrees of freedom, each bound^2 less w^2.
//
// sample: the scatter of these n, slow noise in it; only the measuring is uncertain. If it is t, (n-1) s^2/w^2 has the
// noncentral chi-square distribution of n-1 degrees of freedom and noncentrality (n-1) t^2/w^2, which makes the
// distribution of t: P(t <= x) = P(a scatter of at least s | x).
//
// Source: IEEE Std 528 for the term; NIST/SEMATECH e-Handbook 7.2.3 for the interval. That w^2 is taken off its bounds
// is our own: for n = 6 and w = 0.4 of the scatter it holds 95.0 %, scaling the value by chi-square 88.5 %.
func repeatability(_ context.Context, in Input) quantity.Measured {
	var means []float64
	w2 := 0.0
	for _, r := range in.Recordings {
		s, reason := signalOf(r, in.Gyro.Output)
		if reason != "" {
			return quantity.Voided(radPerS, reason)
		}
		means = append(means, s.mean())
		square, _ := s.white()
		w2 += square/s.seconds + s.rounding(square)*s.rounding(square)
	}
	n := float64(len(means))
	if n < 2 {
		return quantity.Voided(radPerS, "it takes two turn-ons or more")
	}
	w2 /= n
	_, scatter := meanAndScatter(means)
	if in.Options.Measurand == "population" {
		return quantity.Chi(scatter, w2, n-1, radPerS, nil)
	}
	value := math.Sqrt(math.Max(scatter*scatter-w2, 0))
	w := math.Sqrt(w2)
	line := func(u float64) []quantity.Line {
		return []quantity.Line{{Name: "white noise", Value: w, U: u, Sensitivity: 1, Contribution: u, DoF: math.Inf(1)}}
	}
	if scatter > scatterClear*w {
		return quantity.T(value, radPerS, line(w/math.Sqrt(n-1)))
	}
	draws := scatterDraws(scatter/w, n-1)
	for i := range draws {
		draws[i] *= w
	}
	m := quantity.Sample(draws, value, radPerS, nil)
	m.Budget = line(m.U)
	return m
}

// scatterClear: from this ratio of scatter to noise on the distribution is normal within a thousandth of its spread.
const scatterClear = 30

// scatterDraws are the quantiles, at (i+1/2)/count, of a scatter t behind a measured scatter s, both in units of the
// noise's.
func scatterDraws(s, dof float64) []float64 {
	const count, steps = 1000, 240
	most := s + 8/math.Sqrt(dof) // eight standard deviations of s
	draws := make([]float64, count)
	k := 0
	before := 0.0 // P at the end of the step before
	for i := 0; i <= steps && k < count; i++ {
		t := most * float64(i) / steps
		p := 1 - noncentralChiSquareCDF(dof*s*s, dof, dof*t*t)
		for ; k < count && (float64(k)+0.5)/count <= p; k++ {
			if i > 0 { // none at 0: there lies all that is below
				draws[k] = t - most/steps*(p-(float64(k)+0.5)/count)/(p-before)
			}
		}
		before = p
	}
	for ; k < count; k++ {
		draws[k] = most
	}
	return draws
}

// noncentralChiSquareCDF is P(X <= x) of the noncentral chi-square distribution: a Poisson mixture of central ones,
//
//	sum_j e^(-lambda/2) (lambda/2)^j / j!  P(chi2_(nu+2j) <= x)
//
// Source: Johnson, Kotz and Balakrishnan, Continuous Univariate Distributions 2 (1995), chapter 29. Terms are added
// from the most likely j outwards until they are below 1e-12.
func noncentralChiSquareCDF(x, dof, lambda float64) float64 {
	half := lambda / 2
	term := func(j float64) float64 {
		weight := 1.0
		if half > 0 {
			gamma, _ := math.Lgamma(j + 1)
			weight = math.Exp(j*math.Log(half) - half - gamma)
		} else if j > 0 {
			return 0
		}
		return weight * mathext.GammaIncReg(dof/2+j, x/2)
	}
	middle := math.Floor(half)
	sum := 0.0
	spread := math.Ceil(8*math.Sqrt(half)) + 20
	for j := math.Max(middle-spread, 0); j <= middle+spread; j++ {
		sum += term(j)
	}
	return math.Min(sum, 1)
}
