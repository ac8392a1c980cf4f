package reduce

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// law is how the overlapping Allan variances of one recording are spread and correlate, under any coefficients: their
// covariance is a sum over pairs of terms, worked out once a recording.
type law struct {
	tauS     []float64
	variance [][pairCount]float64 // of each point, exact
	shape    [][pairCount]float64 // covariances of points i <= j at i*n+j, from spectra, for their correlations
}

// newLaw works the sums out for n samples averaged over m. The correlation of two points,
//
//	C_ij ~ int S(f)^2 |H_i|^2 |H_j|^2 df,   |H_i|^2 = 2 sin^4(pi f tau_i)/(pi f tau_i)^2
//
// follows from the products of a stationary Gaussian process, S the spectrum of the rate:
//
//	S(f) = tau0 Q^2 (2 pi f)^2 + N^2 + B^2/(2 pi f) + (K/(2 pi f))^2,   f < 1/(2 tau0)
func newLaw(n int, ms []int, tau0S float64) *law {
	l := &law{}
	for _, m := range ms {
		l.tauS = append(l.tauS, float64(m)*tau0S)
		l.variance = append(l.variance, variances(n, m, tau0S))
	}
	points := len(ms)
	l.shape = make([][pairCount]float64, points*points)
	const perDecade = 24
	low, high := 0.02/l.tauS[points-1], 0.5/tau0S
	steps := int(math.Ceil(math.Log10(high/low) * perDecade))
	width := math.Log(high/low) / float64(steps)
	h := make([]float64, points)
	for p := range steps {
		freq := low * math.Exp((float64(p)+0.5)*width)
		for i, tau := range l.tauS {
			h[i] = differenceGain(math.Pi * freq * tau)
		}
		w := 2 * math.Pi * freq
		s := coefficients{termQ: tau0S * w * w, termN: 1, termB: 1 / w, termK: 1 / (w * w)}
		var power [pairCount]float64
		for k, pair := range pairs {
			power[k] = s[pair[0]] * s[pair[1]] * freq * width
		}
		for i := range points {
			for j := i; j < points; j++ {
				both := h[i] * h[j]
				cell := &l.shape[i*points+j]
				for k := range power {
					cell[k] += power[k] * both
				}
			}
		}
	}
	for i := range points {
		for j := i + 1; j < points && ms[j] <= whiteExact; j++ {
			l.shape[i*points+j][pairNN] = whiteCorrelation(ms[i], ms[j]) * math.Sqrt(l.shape[i*points+i][pairNN]*l.shape[j*points+j][pairNN])
		}
	}
	return l
}

// Spectra end where sampled noise differs from noise averaged within tau0. White noise rules there, and up to this m its
// correlations are summed lag by lag.
const whiteExact = 32

// pairNN is the place of (N, N) in pairs.
const pairNN = terms

// whiteCorrelation is that of two overlapping Allan variances of many samples of white noise: their second differences,
// lagging u, have the covariance R(u) = sum_ab w_a w_b phi(u + b m_j - a m_i), w = 1, -2, 1 and phi(s) = -|s|/2, and
//
//	rho = sum_u R_ij^2 / sqrt(sum_u R_ii^2 sum_u R_jj^2)
func whiteCorrelation(mi, mj int) float64 {
	squares := func(m, n int) float64 {
		sum := 0.0
		for u := -2 * n; u <= 2*m; u++ {
			r := 0.0
			for a, wa := range [...]float64{1, -2, 1} {
				for b, wb := range [...]float64{1, -2, 1} {
					r += wa * wb * angleCovariance[termN](float64(u+b*n-a*m))
				}
			}
			sum += r * r
		}
		return sum
	}
	return squares(mi, mj) / math.Sqrt(squares(mi, mi)*squares(mj, mj))
}

// differenceGain is 2 sin^4(x)/x^2; where many turns lie within a step of the grid, with the mean of sin^4.
func differenceGain(x float64) float64 {
	if x > 4 {
		return 2 * 0.375 / (x * x)
	}
	sine := math.Sin(x)
	return 2 * sine * sine * sine * sine / (x * x)
}

// variances of the points under a model.
func (l *law) variances(c coefficients) []float64 {
	products := c.products()
	v := make([]float64, len(l.variance))
	for i := range v {
		v[i] = dot(&products, &l.variance[i])
	}
	return v
}

// correlation of the points (all, or those of the given indices) under a model.
func (l *law) correlation(c coefficients, indices []int) *mat.SymDense {
	points := len(l.tauS)
	if indices == nil {
		for i := range points {
			indices = append(indices, i)
		}
	}
	products := c.products()
	n := len(indices)
	r := mat.NewSymDense(n, nil)
	for a, i := range indices {
		for b := a; b < n; b++ {
			r.SetSym(a, b, dot(&products, &l.shape[i*points+indices[b]]))
		}
	}
	for a := range n {
		for b := a + 1; b < n; b++ {
			r.SetSym(a, b, r.At(a, b)/math.Sqrt(r.At(a, a)*r.At(b, b)))
		}
	}
	for a := range n {
		r.SetSym(a, a, 1)
	}
	return r
}

func dot(a, b *[pairCount]float64) float64 {
	sum := 0.0
	for i := range a {
		sum += a[i] * b[i]
	}
	return sum
}

// cholesky factors a correlation, with as much added to its diagonal as rounding asks for.
func cholesky(r *mat.SymDense) *mat.TriDense {
	n := r.SymmetricDim()
	for jitter := 1e-10; ; jitter *= 10 {
		for i := range n {
			r.SetSym(i, i, 1+jitter)
		}
		var c mat.Cholesky
		if c.Factorize(r) {
			lower := mat.NewTriDense(n, mat.Lower, nil)
			c.LTo(lower)
			return lower
		}
	}
}
