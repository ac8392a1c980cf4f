package reduce

import (
	"math"
	"math/rand/v2"

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
const flickerPlateau = 2 * math.Ln2 / math.Pi

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

// noiseFit is the model fitted to the overlapping Allan variances of one recording at rest.
type noiseFit struct {
	tauS     []float64
	variance []float64
	law      *law
	allowed  [terms]bool // the terms that the output can have
	got      coefficients
	dof      []float64     // of each variance, under the fitted model
	root     *mat.TriDense // Cholesky factor of their correlation
	problem  *equations
}

// Grid of averaging times: eight a decade, up to a fifth of the recording. Beyond, one recording says next to nothing.
const (
	tauPerDecade = 8
	tauParts     = 5
)

// fitSamplesLeast is the shortest recording that has a curve to fit.
const fitSamplesLeast = 50

// StabilityTaus is the grid of averaging times, in s, on which the bias instability of so many samples is read.
func StabilityTaus(samples int, intervalS float64) []float64 {
	var taus []float64
	for _, m := range averaging(samples/tauParts, tauPerDecade) {
		taus = append(taus, float64(m)*intervalS)
	}
	return taus
}

// fitNoise fits Q, N, B and K to a recording at rest by non-negative least squares over the whole curve. Each point is
// weighted by the inverse of its variance under the model; the weights are found in three rounds. Void with a reason.
func fitNoise(s signal) (*noiseFit, string) {
	n := len(s.counts)
	if n < fitSamplesLeast {
		return nil, "the recording is too short for an Allan curve: at least 50 samples are needed"
	}
	f := &noiseFit{allowed: [terms]bool{termQ: s.angle, termN: true, termB: true, termK: true}}
	ms := averaging(n/tauParts, tauPerDecade)
	theta := prefix(s.counts)
	for _, m := range ms {
		f.tauS = append(f.tauS, float64(m)*s.tau0S)
		f.variance = append(f.variance, allanVarianceSparse(theta, m)*s.count*s.count)
	}
	if f.variance[0] == 0 {
		return nil, "the recording does not vary: the gyro is stuck, or its noise is below its resolution"
	}
	f.law = newLaw(n, ms, s.tau0S)
	f.got = coefficients{termN: f.variance[0] * f.tauS[0]}
	for range 3 {
		f.weigh()
		f.got = f.problem.solve(f.variance, f.allowed)
	}
	f.weigh()
	f.root = cholesky(f.law.correlation(f.got, nil))
	return f, ""
}

// weigh sets each point's weight and degrees of freedom, 2 sigma^4/var, under the model fitted so far.
func (f *noiseFit) weigh() {
	spread := f.law.variances(f.got)
	weights := make([]float64, len(spread))
	f.dof = f.dof[:0]
	for i, v := range spread {
		s := f.got.variance(f.tauS[i])
		weights[i] = 1 / v
		f.dof = append(f.dof, 2*s*s/v)
	}
	f.problem = newEquations(f.tauS, weights)
}

// refits draws vectors of Allan variances under the fitted noise and fits each again. A variance with edf degrees of
// freedom is drawn as the fitted one times chi2/edf (Wilson and Hilferty's cube), the points correlated as they are;
// samples are never drawn.
func (f *noiseFit) refits(seed uint64, count int) []coefficients {
	random := rand.New(rand.NewPCG(seed, refitStream))
	n := len(f.tauS)
	z, variance := make([]float64, n), make([]float64, n)
	rows := make([][]float64, n)
	for i := range rows {
		for j := range i + 1 {
			rows[i] = append(rows[i], f.root.At(i, j))
		}
	}
	list := make([]coefficients, count)
	for d := range list {
		for i := range z {
			z[i] = random.NormFloat64()
		}
		for i := range n {
			x := 0.0
			for j, r := range rows[i] {
				x += r * z[j]
			}
			k := 2 / (9 * f.dof[i])
			cube := math.Max(1-k+x*math.Sqrt(k), 0)
			variance[i] = f.got.variance(f.tauS[i]) * cube * cube * cube
		}
		list[d] = f.problem.solve(variance, f.allowed)
	}
	return list
}

const refitStream = 0x7265666974 // "refit"
