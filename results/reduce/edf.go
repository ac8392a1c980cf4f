package reduce

import "math"

// The second difference of the angle, d_k = theta[k+2m] - 2 theta[k+m] + theta[k], is stationary under every term of the
// noise model. With phi(s) the term's generalised covariance of the angle,
//
//	R(u) = 6 phi(u) - 4 (phi(u-tau) + phi(u+tau)) + phi(u-2tau) + phi(u+2tau),   sigma^2(tau) = R(0)/(2 tau^2)
//
// of unit coefficients: N: -|s|/2; B: s^2 ln|s|/(2 pi); K: |s|^3/12; Q: 1 at s = 0, else 0. An overlapping Allan
// variance is the mean of M squares d_k^2, so that with R the sum over the terms
//
//	edf = M / (1 + 2 sum_{j=1}^{M-1} (1 - j/M) (R_j/R_0)^2)
//
// Source: Greenhall and Riley, PTTI 2003, whose sum this is with their limit of many samples within tau. White noise
// here is that of samples, not of an average within tau0: the difference is 17 % at m = 1 and 1 % at m = 100.
func differenceCovariance(term int, u, tau float64) float64 {
	phi := angleCovariance[term]
	return 6*phi(u) - 4*(phi(u-tau)+phi(u+tau)) + phi(u-2*tau) + phi(u+2*tau)
}

var angleCovariance = [terms]func(s float64) float64{
	termQ: func(s float64) float64 {
		if s == 0 {
			return 1
		}
		return 0
	},
	termN: func(s float64) float64 { return -math.Abs(s) / 2 },
	termB: func(s float64) float64 {
		if s == 0 {
			return 0
		}
		return s * s * math.Log(math.Abs(s)) / (2 * math.Pi)
	},
	termK: func(s float64) float64 { return math.Abs(s*s*s) / 12 },
}

// pairs are the products of two terms, of which the variance of an Allan variance is a sum.
var pairs = func() (list [][2]int) {
	for t := range terms {
		for u := t; u < terms; u++ {
			list = append(list, [2]int{t, u})
		}
	}
	return list
}()

const pairCount = terms * (terms + 1) / 2

// products are the squares of a model's coefficients multiplied in pairs, unequal ones twice.
func (c coefficients) products() (p [pairCount]float64) {
	for i, pair := range pairs {
		p[i] = c[pair[0]] * c[pair[1]]
		if pair[0] != pair[1] {
			p[i] *= 2
		}
	}
	return p
}

// Lags are summed one by one up to this many within tau; beyond, on a grid of as many.
const lagsPerTau = 24

// Flicker's covariance dies away as the square of the lag; after six tau its square is nothing.
const lagTaus = 6

// variances gives, for each pair of terms, what it adds to the variance of the overlapping Allan variance at m tau0 of
// n samples:
//
//	Var = (2/M) (R_0^2 + 2 sum_j (1 - j/M) R_j^2) / (2 tau^2)^2
func variances(n, m int, tau0S float64) (v [pairCount]float64) {
	count := float64(n - 2*m + 1)
	tau := float64(m) * tau0S
	step := 1
	if m > lagsPerTau {
		step = m / lagsPerTau
	}
	var r [terms]float64
	add := func(lag int, weight float64) {
		for t := range terms {
			r[t] = 0
			if t != termQ {
				r[t] = differenceCovariance(t, float64(lag)*tau0S, tau)
			}
		}
		weight *= 1 - float64(lag)/count
		for i, pair := range pairs {
			v[i] += weight * r[pair[0]] * r[pair[1]]
		}
	}
	// The trapezium over both signs of the lag, in steps: the sum over lags is step times that over the grid.
	add(0, float64(step))
	for lag := step; lag <= lagTaus*m && float64(lag) < count; lag += step {
		add(lag, 2*float64(step))
	}
	// Quantisation correlates at three lags only, each counted once.
	for k, peak := range []float64{6, -4, 1} {
		lag := k * m
		if float64(lag) >= count {
			break
		}
		weight := 2 * (1 - float64(lag)/count)
		if k == 0 {
			weight = 1
		}
		for i, pair := range pairs {
			switch {
			case pair[0] == termQ && pair[1] == termQ:
				v[i] += weight * peak * peak
			case pair[0] == termQ:
				v[i] += weight * peak * differenceCovariance(pair[1], float64(lag)*tau0S, tau)
			}
		}
	}
	scale := 2 / count / (4 * tau * tau * tau * tau)
	for i := range v {
		v[i] *= scale
	}
	return v
}
