package reduce

import (
	"context"
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/mat"

	"proofrate/limits/quantity"
)

// tableLine is the part of the table's calibration in a relative scale factor: shared by all gyros of the run.
func (m *measuredSweep) tableLine(slope float64) quantity.Line {
	return quantity.Line{Name: "rate of the table", Instrument: m.bench.Instrument + " table.rate", Value: 1, U: m.bench.TableRate.U,
		Sensitivity: -slope, Contribution: math.Abs(slope) * m.bench.TableRate.U, DoF: math.Inf(1)}
}

// linear makes the method of a figure that is smooth in the outputs.
func linear(figure func(Sweep) float64, ofTable bool) func(context.Context, Input) quantity.Measured {
	return func(_ context.Context, in Input) quantity.Measured {
		m, reason := sweepOf(in)
		if m == nil {
			return quantity.Voided(ratio, reason)
		}
		budget := m.parts(m.gradient(figure))
		if ofTable {
			budget = append(budget, m.tableLine(m.Line().Slope))
		}
		return quantity.T(figure(m.Sweep), ratio, budget)
	}
}

// The methods whose figure is smooth in the outputs. Budget: white and slow noise of the gyro, reading of the table's
// rate, centripetal acceleration; scale factor and its error: the table's calibration too, which the others do not feel.
var (
	scaleFactor      = linear(func(s Sweep) float64 { return s.Line().Slope }, true)
	scaleFactorError = linear(Sweep.Error, true)
	asymmetry        = linear(Sweep.Asymmetry, false)
)

func nonlinearity(_ context.Context, in Input) quantity.Measured {
	ofReading := in.Options.Relative == "reading"
	return largest(in, func(s Sweep) float64 { return s.Nonlinearity(in.Gyro.Range, ofReading, in.Options.Least) })
}

func hysteresis(_ context.Context, in Input) quantity.Measured {
	return largest(in, func(s Sweep) float64 { return s.Hysteresis(in.Gyro.Range) })
}

// largestDraws carry the distribution of a figure that is the largest of several.
const largestDraws = 2000

// largest measures a figure that is the largest of several noisy residuals, and so biased high.
//
// The noise of the outputs, e, adds to the residuals r as variances do: what noise alone makes is E = mean f(e)^2, where
// f(e) is the figure of a sweep that is straight but for e. So
//
//	value^2 = max(f(y)^2 - E, 0),   draws^2 = max(f(y - e)^2 - 2 E, 0)
//
// since y - e has the noise twice, once measured and once drawn. Where the residuals stand out of the noise this takes
// off next to nothing; where they do not, draws reach zero, as the truth may. The interval is theirs. The standard
// uncertainty is the spread of value for a sweep whose residuals are as large as value says, with the noise once.
func largest(in Input, figure func(Sweep) float64) quantity.Measured {
	m, reason := sweepOf(in)
	if m == nil {
		return quantity.Voided(ratio, reason)
	}
	measured := figure(m.Sweep)
	if math.IsNaN(measured) {
		return quantity.Voided(ratio, "no rate was come to from both sides; a full traverse is needed (0, +, 0, -, 0, +)")
	}
	root := factor(m.covariance())
	random := rand.New(rand.NewPCG(m.seed, largestStream))
	n := len(m.Sweep)
	z := make([]float64, n)
	moved := make(Sweep, n)
	draws := make([]float64, largestDraws)
	straight := make(Sweep, n)
	line := m.Line()
	alone := 0.0
	for d := range draws {
		for i := range z {
			z[i] = random.NormFloat64()
		}
		for i := range n {
			e := 0.0
			for j := 0; j <= i; j++ {
				e += root.At(i, j) * z[j]
			}
			moved[i], straight[i] = m.Sweep[i], m.Sweep[i]
			moved[i].Output -= e
			straight[i].Output = line.Slope*m.Sweep[i].Input + line.Offset + e
		}
		draws[d] = figure(moved)
		f := figure(straight)
		alone += f * f / largestDraws
	}
	for d := range draws {
		draws[d] = math.Sqrt(math.Max(draws[d]*draws[d]-2*alone, 0))
	}
	value := math.Sqrt(math.Max(measured*measured-alone, 0))
	result := quantity.Sample(draws, value, ratio, nil)
	result.U = m.spread(figure, value/measured, alone, root, random)
	result.Budget = []quantity.Line{{Name: "noise and reading", Value: math.Sqrt(alone), U: result.U, Sensitivity: 1, Contribution: result.U, DoF: math.Inf(1)}}
	return result
}

// spread is the standard deviation of sqrt(max(f^2 - alone, 0)) over sweeps whose residuals are those measured times
// shrunk, each with noise drawn anew.
func (m *measuredSweep) spread(figure func(Sweep) float64, shrunk, alone float64, root *mat.TriDense, random *rand.Rand) float64 {
	n := len(m.Sweep)
	line := m.Line()
	z, sweep := make([]float64, n), make(Sweep, n)
	values := make([]float64, largestDraws)
	for d := range values {
		for i := range z {
			z[i] = random.NormFloat64()
		}
		for i, p := range m.Sweep {
			sweep[i] = p
			straight := line.Slope*p.Input + line.Offset
			sweep[i].Output = straight + shrunk*(p.Output-straight)
			for j := 0; j <= i; j++ {
				sweep[i].Output += root.At(i, j) * z[j]
			}
		}
		f := figure(sweep)
		values[d] = math.Sqrt(math.Max(f*f-alone, 0))
	}
	_, scatter := meanAndScatter(values)
	return scatter
}

const largestStream = 0x6c617267657374 // "largest"

// factor is the Cholesky factor of a covariance, with as much on its diagonal as rounding asks for.
func factor(c [][]float64) *mat.TriDense {
	n := len(c)
	for jitter := 1e-12; ; jitter *= 10 {
		sym := mat.NewSymDense(n, nil)
		for i := range n {
			for j := i; j < n; j++ {
				sym.SetSym(i, j, c[i][j])
			}
			sym.SetSym(i, i, c[i][i]*(1+jitter))
		}
		var cholesky mat.Cholesky
		if cholesky.Factorize(sym) {
			lower := mat.NewTriDense(n, mat.Lower, nil)
			cholesky.LTo(lower)
			return lower
		}
	}
}
