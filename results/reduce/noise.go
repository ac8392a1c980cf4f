package reduce

import (
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"
)

// The noise model, by its coefficients squared:
//
//	sigma^2(tau) = 3 Q^2/tau^2 + N^2/tau + (2 ln 2/pi) B^2 + K^2 tau/3
//
// Units: Q rad, N rad/sqrt(s), B rad/s, K rad/s/sqrt(s).   Source: IEEE Std 952-1997, annex C.
const (
	termQ = iota
	termN
	termB
	termK
	terms
)

type coefficients [terms]float64 // squares

// flickerPlateau is sigma^2/B^2 on the flat of flicker: 2 ln 2/pi, the square of 0.664.
var flickerPlateau = 2 * math.Ln2 / math.Pi

// column is the share of each coefficient in sigma^2(tau).
func column(tauS float64) coefficients {
	return coefficients{3 / (tauS * tauS), 1 / tauS, flickerPlateau, tauS / 3}
}

func (c coefficients) variance(tauS float64) float64 {
	shares := column(tauS)
	sum := 0.0
	for t := range c {
		sum += c[t] * shares[t]
	}
	return sum
}

// spectrum is the two-sided power spectral density of the rate at f > 0, in rad^2/s^2/Hz.
//
//	S(f) = tau0 Q^2 (2 pi f)^2 + N^2 + B^2/(2 pi f) + (K/(2 pi f))^2       (quantisation for f << 1/tau0)
func (c coefficients) spectrum(f, tau0S float64) float64 {
	w := 2 * math.Pi * f
	return c[termQ]*tau0S*w*w + c[termN] + c[termB]/w + c[termK]/(w*w)
}

// noiseFit is the model fitted to the overlapping Allan variances of one recording at rest.
type noiseFit struct {
	tauS       []float64
	variance   []float64
	dof        []float64
	root       *mat.TriDense // Cholesky factor of the correlation of the estimates
	weights    []float64
	active     [terms]bool // which terms the output can have
	got        coefficients
	tau0S      float64
	longestTau float64
}

// Grid of averaging times: eight a decade, up to a fifth of the recording. Beyond, one recording says next to nothing.
const (
	tauPerDecade = 8
	tauParts     = 5
)

// fitNoise fits Q, N, B and K to a recording at rest by non-negative least squares over the whole curve. Each point is
// weighted by the inverse of its variance under the model, 2 sigma^4/edf; the weights are found in three rounds.
func fitNoise(s signal, output string) (*noiseFit, string) {
	most := len(s.counts) / tauParts
	if most < 10 {
		return nil, "the recording is too short for an Allan curve: at least 50 samples are needed"
	}
	f := &noiseFit{tau0S: s.tau0S}
	f.active = [terms]bool{termQ: output == "angle", termN: true, termB: true, termK: true}
	theta := prefix(s.counts)
	for _, m := range averaging(most, tauPerDecade) {
		v, _ := allanVariance(theta, m)
		f.tauS = append(f.tauS, float64(m)*s.tau0S)
		f.variance = append(f.variance, v*s.count*s.count)
	}
	f.longestTau = f.tauS[len(f.tauS)-1]
	if f.variance[0] == 0 {
		return nil, "the recording does not vary: the gyro is stuck, or its noise is below its resolution"
	}
	model := coefficients{termN: f.variance[0] * f.tauS[0]}
	for range 3 {
		covariance := f.covariance(model, s.seconds)
		f.weigh(model, covariance)
		model = f.solve(f.variance)
	}
	f.got = model
	f.correlate(f.covariance(model, s.seconds))
	return f, ""
}

// covariance of the estimated variances under a model, for a recording of so many seconds:
//
//	C_ij = (2/T_ij) int S(f)^2 |H_i|^2 |H_j|^2 df over all f,   |H_i|^2 = 2 sin^4(pi f tau_i)/(pi f tau_i)^2
//
// T_ij the time that both have differences for. It follows from the products of a stationary Gaussian process (its
// second differences are stationary for all terms) and reproduces the degrees of freedom of Greenhall and Riley where
// those assume noise that is averaged within tau0.
func (f *noiseFit) covariance(model coefficients, seconds float64) *mat.SymDense {
	n := len(f.tauS)
	const perDecade = 60
	low, high := 0.02/f.longestTau, 0.5/f.tau0S
	points := int(math.Ceil(math.Log10(high/low) * perDecade))
	step := math.Log(high/low) / float64(points)
	sum := make([]float64, n*n)
	h := make([]float64, n)
	for p := range points {
		freq := low * math.Exp((float64(p)+0.5)*step)
		for i, tau := range f.tauS {
			x := math.Pi * freq * tau
			if x < 4 {
				sine := math.Sin(x)
				h[i] = 2 * sine * sine * sine * sine / (x * x)
			} else {
				h[i] = 2 * 0.375 / (x * x) // many turns within one step of the grid: the mean of sin^4
			}
		}
		power := model.spectrum(freq, f.tau0S)
		weight := power * power * freq * step * 2 // both signs of f
		for i := range n {
			for j := i; j < n; j++ {
				sum[i*n+j] += weight * h[i] * h[j]
			}
		}
	}
	c := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			span := math.Max(seconds-2*f.tauS[j], f.tauS[j]) + f.tau0S
			c.SetSym(i, j, 2/span*sum[i*n+j])
		}
	}
	return c
}

// weigh sets the weights from the covariance's diagonal, and each point's degrees of freedom 2 sigma^4/var.
func (f *noiseFit) weigh(model coefficients, c *mat.SymDense) {
	f.weights, f.dof = f.weights[:0], f.dof[:0]
	for i, tau := range f.tauS {
		v := model.variance(tau)
		f.weights = append(f.weights, 1/c.At(i, i))
		f.dof = append(f.dof, 2*v*v/c.At(i, i))
	}
}

// correlate factors the correlation matrix, with as much added to its diagonal as rounding asks for.
func (f *noiseFit) correlate(c *mat.SymDense) {
	n := len(f.tauS)
	r := mat.NewSymDense(n, nil)
	for jitter := 1e-10; ; jitter *= 10 {
		for i := range n {
			for j := i; j < n; j++ {
				r.SetSym(i, j, c.At(i, j)/math.Sqrt(c.At(i, i)*c.At(j, j)))
			}
			r.SetSym(i, i, 1+jitter)
		}
		var cholesky mat.Cholesky
		if cholesky.Factorize(r) {
			f.root = mat.NewTriDense(n, mat.Lower, nil)
			cholesky.LTo(f.root)
			return
		}
	}
}

// solve minimises sum w_i (variance_i - sum_t c_t column_t(tau_i))^2 over c >= 0. With four terms the active set is
// found by trying all: the best feasible of at most fifteen unconstrained solutions is the solution.
func (f *noiseFit) solve(variance []float64) coefficients {
	var normal [terms][terms]float64
	var right [terms]float64
	total := 0.0
	var scale coefficients
	for t := range scale { // columns differ by many orders of magnitude
		for i, tau := range f.tauS {
			c := column(tau)[t]
			scale[t] += f.weights[i] * c * c
		}
		scale[t] = 1 / math.Sqrt(scale[t])
	}
	for i, tau := range f.tauS {
		c := column(tau)
		total += f.weights[i] * variance[i] * variance[i]
		for a := range c {
			right[a] += f.weights[i] * c[a] * scale[a] * variance[i]
			for b := range c {
				normal[a][b] += f.weights[i] * c[a] * scale[a] * c[b] * scale[b]
			}
		}
	}
	var best coefficients
	least := math.Inf(1)
	for set := 1; set < 1<<terms; set++ {
		var members []int
		for t := range terms {
			if set>>t&1 == 1 {
				members = append(members, t)
			}
		}
		if slices.ContainsFunc(members, func(t int) bool { return !f.active[t] }) {
			continue
		}
		x, ok := smallSolve(&normal, &right, members)
		if !ok || slices.ContainsFunc(members, func(t int) bool { return x[t] < 0 }) {
			continue
		}
		cost := total
		for _, t := range members {
			cost -= x[t] * right[t]
		}
		if cost < least {
			least = cost
			for t := range best {
				best[t] = x[t] * scale[t]
			}
		}
	}
	return best
}

// smallSolve solves the normal equations of some terms by Gaussian elimination.
func smallSolve(normal *[terms][terms]float64, right *[terms]float64, members []int) (x [terms]float64, ok bool) {
	var a [terms][terms + 1]float64
	n := len(members)
	for i, t := range members {
		for j, u := range members {
			a[i][j] = normal[t][u]
		}
		a[i][n] = right[t]
	}
	for i := range n {
		if a[i][i] < 1e-12 { // columns are scaled to 1: nothing is left of this one
			return x, false
		}
		for k := i + 1; k < n; k++ {
			factor := a[k][i] / a[i][i]
			for j := i; j <= n; j++ {
				a[k][j] -= factor * a[i][j]
			}
		}
	}
	for i := n - 1; i >= 0; i-- {
		sum := a[i][n]
		for j := i + 1; j < n; j++ {
			sum -= a[i][j] * x[members[j]]
		}
		x[members[i]] = sum / a[i][i]
	}
	return x, true
}

// refits draws vectors of Allan variances under the fitted noise and fits each again. A variance with edf degrees of
// freedom is drawn as the fitted one times chi2/edf (Wilson and Hilferty's cube), the points correlated as they are;
// samples are never drawn.
func (f *noiseFit) refits(seed uint64, count int) []coefficients {
	random := rand.New(rand.NewPCG(seed, refitStream))
	n := len(f.tauS)
	z, variance := make([]float64, n), make([]float64, n)
	list := make([]coefficients, count)
	for d := range list {
		for i := range z {
			z[i] = random.NormFloat64()
		}
		for i := range n {
			x := 0.0
			for j := 0; j <= i; j++ {
				x += f.root.At(i, j) * z[j]
			}
			k := 2 / (9 * f.dof[i])
			cube := math.Max(1-k+x*math.Sqrt(k), 0)
			variance[i] = f.got.variance(f.tauS[i]) * cube * cube * cube
		}
		list[d] = f.solve(variance)
	}
	return list
}

const refitStream = 0x7265666974 // "refit"

// StabilityTaus is the grid of averaging times, in s, on which the bias instability of so many samples is read.
func StabilityTaus(samples int, intervalS float64) []float64 {
	var taus []float64
	for _, m := range averaging(samples/tauParts, tauPerDecade) {
		taus = append(taus, float64(m)*intervalS)
	}
	return taus
}
