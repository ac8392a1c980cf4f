package reduce

import "math"

// Flicker as a sum of first-order Markov processes, one a decade of correlation time, each of variance
// v = B^2 ln(10)/pi: flat at (2 ln 2/pi) B^2 within 1.1 % inside the decades that are covered. The decades reach a
// decade beyond what a sweep spans on each side.
var markovTimesS = []float64{0.01, 0.1, 1, 10, 100, 1e3, 1e4, 1e5}

// windows is the covariance of the means of slow noise over windows, in (rad/s)^2.
//
// Markov process, variance v, time T, windows of lengths a and b that begin d apart (not overlapping, d >= a):
//
//	cov = v (T/a)(T/b) (1 - e^(-a/T)) (1 - e^(-b/T)) e^(-(d-a)/T)
//	var = 2 v (T/a) (1 - (T/a)(1 - e^(-a/T)))
//
// Rate random walk, from the first window's begin: cov = K^2 (begin_i + a_i/2) for the earlier i, var = K^2 (begin_i +
// a_i/3); what is common to all windows drops out of every figure that is a contrast.
func (c coefficients) windows(w []window) [][]float64 {
	cov := make([][]float64, len(w))
	for i := range cov {
		cov[i] = make([]float64, len(w))
	}
	v := c[termB] * math.Ln10 / math.Pi
	for i := range w {
		for j := i; j < len(w); j++ {
			sum := 0.0
			a, b := w[i], w[j]
			if a.startS > b.startS {
				a, b = b, a
			}
			for _, t := range markovTimesS {
				x, y := a.lengthS/t, b.lengthS/t
				if i == j {
					sum += 2 * v / x * (1 + math.Expm1(-x)/x)
				} else {
					sum += v / (x * y) * math.Expm1(-x) * math.Expm1(-y) * math.Exp(-math.Max(b.startS-a.startS-a.lengthS, 0)/t)
				}
			}
			since := a.startS - w[0].startS
			if i == j {
				sum += c[termK] * (since + a.lengthS/3)
			} else {
				sum += c[termK] * (since + a.lengthS/2)
			}
			cov[i][j], cov[j][i] = sum, sum
		}
	}
	return cov
}
