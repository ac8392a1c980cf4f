package reduce

import (
	"math"

	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

// prefix gives the running sums of counts, from 0: theta in counts. Exact as long as they fit an int64, which 2^62
// counts do.
func prefix(counts []int64) []int64 {
	theta := make([]int64, len(counts)+1)
	for i, c := range counts {
		theta[i+1] = theta[i] + c
	}
	return theta
}

// allanVariance is the overlapping Allan variance of rates at averaging time m tau0, in counts^2, with the number of
// differences it is a mean of.
//
//	sigma^2(m tau0) = sum_{k=0}^{n-2m-1} (theta[k+2m] - 2 theta[k+m] + theta[k])^2 / (2 m^2 (n-2m))
//
// Shape:  theta has n points, n > 2m, m >= 1.
// Source: IEEE Std 952-1997, annex C; NIST SP 1065, 5.2.4. The differences are exact integers.
func allanVariance(theta []int64, m int) (variance float64, n int) {
	n = len(theta) - 2*m
	// Four sums, so that the additions do not wait for one another; their order is fixed.
	var sums [4]float64
	a, b, c := theta[:n], theta[m:m+n], theta[2*m:2*m+n]
	for k := range a {
		d := float64(c[k] - 2*b[k] + a[k])
		sums[k&3] += float64(d * d)
	}
	return (sums[0] + sums[1] + sums[2] + sums[3]) / (2 * float64(m) * float64(m) * float64(n)), n
}

// allanVarianceSparse is the same from every sixteenth part of m only: what it leaves out is all but known from what it
// takes, and a long recording's whole curve costs little more than its first points.
func allanVarianceSparse(theta []int64, m int) float64 {
	stride := max(1, m/16)
	sum, n := 0.0, 0
	for k := 0; k+2*m < len(theta); k += stride {
		d := float64(theta[k+2*m] - 2*theta[k+m] + theta[k])
		sum += float64(d * d)
		n++
	}
	return sum / (2 * float64(m) * float64(m) * float64(n))
}

// Point is one point of an Allan curve.
type Point struct {
	Tau       float64 // s
	Deviation float64
	Low, High float64 // 95 %, for white noise's degrees of freedom
	N         int     // differences
}

// AllanCurve is the overlapping Allan deviation of a recording's first channel, in the unit of the channel's count,
// at averaging times m = 1, 2, 3, ... that are about evenly spaced in their logarithm, perDecade of them a decade, up to
// a third of the recording. With perDecade 0 it is every m.
func AllanCurve(r *recording.Recording, perDecade int) []Point {
	counts := r.Counts[0]
	theta := prefix(counts)
	n := len(counts)
	var curve []Point
	for _, m := range averaging(n/3, perDecade) {
		variance, differences := allanVariance(theta, m)
		deviation := math.Sqrt(variance) * r.Channels[0].Count.Number
		chi := quantity.Chi(deviation, 0, whiteDoF(n, m), quantity.Unit{}, nil)
		curve = append(curve, Point{Tau: float64(m) * r.SampleInterval, Deviation: deviation, Low: chi.Low, High: chi.High, N: differences})
	}
	return curve
}

// averaging gives numbers of samples from 1 to most.
func averaging(most, perDecade int) []int {
	var list []int
	if perDecade == 0 {
		for m := 1; m <= most; m++ {
			list = append(list, m)
		}
		return list
	}
	for i := 0; ; i++ {
		m := int(math.Round(math.Pow(10, float64(i)/float64(perDecade))))
		if m > most {
			return list
		}
		if len(list) == 0 || m > list[len(list)-1] {
			list = append(list, m)
		}
	}
}

// whiteDoF is the equivalent degrees of freedom of the overlapping Allan variance of sampled white noise, exactly: with
// second differences of running sums of N = n+1 points, M = n - 2m + 1 of them,
//
//	edf = M / (1 + 2 sum_{j=1}^{2m-1} (1 - j/M) rho_j^2)
//
// rho_j the autocorrelation of the second difference at lag j: 1 - 3j/(2m) for j <= m, -(1/2)(2 - j/m) for m < j < 2m.
// Source: the sum in Greenhall and Riley, PTTI 2003, for noise sampled rather than averaged inside tau0.
func whiteDoF(n, m int) float64 {
	count := float64(n - 2*m + 1)
	sum := 0.0
	step := max(1, m/256) // the correlation is piecewise linear in j: a coarse sum is as good
	for j := step; j < 2*m; j += step {
		if float64(j) >= count {
			break
		}
		rho := 1 - 1.5*float64(j)/float64(m)
		if j > m {
			rho = -0.5 * (2 - float64(j)/float64(m))
		}
		sum += float64(step) * (1 - float64(j)/count) * rho * rho
	}
	sum += float64(step-1) / 2 // the first cell, where rho is 1 at lag 0
	return count / (1 + 2*sum)
}
