package reduce

import "math"

// equations are the normal equations of the weighted least-squares problem
//
//	minimise sum_i w_i (y_i - sum_t c_t column_t(tau_i))^2,   c >= 0
//
// with every column scaled to length 1: they differ by many orders of magnitude.
type equations struct {
	normal  [terms][terms]float64
	scale   coefficients
	columns []coefficients // scaled and weighted: their products with y are the right-hand side
	weights []float64
}

func newEquations(tauS, weights []float64) *equations {
	e := &equations{weights: weights, columns: make([]coefficients, len(tauS))}
	for i, tau := range tauS {
		for t, c := range column(tau) {
			e.scale[t] += weights[i] * c * c
		}
	}
	for t := range e.scale {
		e.scale[t] = 1 / math.Sqrt(e.scale[t])
	}
	for i, tau := range tauS {
		c := column(tau)
		for a := range c {
			e.columns[i][a] = weights[i] * c[a] * e.scale[a]
			for b := range c {
				e.normal[a][b] += weights[i] * c[a] * e.scale[a] * c[b] * e.scale[b]
			}
		}
	}
	return e
}

// solve finds the solution among the allowed terms. With four terms the active set is found by trying all: the best
// feasible one of at most fifteen unconstrained solutions is the solution, since the problem is convex.
func (e *equations) solve(y []float64, allowed [terms]bool) coefficients {
	var right [terms]float64
	for i, c := range e.columns {
		for t := range c {
			right[t] += c[t] * y[i]
		}
	}
	var best [terms]float64
	gain := 0.0 // what the sum of squares is lower than without any term
	for _, members := range subsets {
		x, ok := e.unconstrained(&right, members, &allowed)
		if !ok {
			continue
		}
		lower := 0.0
		for _, t := range members {
			lower += x[t] * right[t]
		}
		if lower > gain {
			gain, best = lower, x
		}
	}
	for t := range best {
		best[t] *= e.scale[t]
	}
	return best
}

// subsets of the terms, but for the empty one.
var subsets = func() (list [][]int) {
	for set := 1; set < 1<<terms; set++ {
		var members []int
		for t := range terms {
			if set>>t&1 == 1 {
				members = append(members, t)
			}
		}
		list = append(list, members)
	}
	return list
}()

// unconstrained solves for some terms by Gaussian elimination; false if one is not allowed, comes out negative, or is
// all but a sum of the others.
func (e *equations) unconstrained(right *[terms]float64, members []int, allowed *[terms]bool) (x [terms]float64, ok bool) {
	var a [terms][terms + 1]float64
	n := len(members)
	for i, t := range members {
		if !allowed[t] {
			return x, false
		}
		for j, u := range members {
			a[i][j] = e.normal[t][u]
		}
		a[i][n] = right[t]
	}
	for i := range n {
		if a[i][i] < 1e-12 { // columns are scaled to 1
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
		if x[members[i]] < 0 {
			return x, false
		}
	}
	return x, true
}
