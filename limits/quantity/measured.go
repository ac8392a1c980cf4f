package quantity

import (
	"fmt"
	"math"
	"slices"
	"sort"
	"strconv"

	"gonum.org/v1/gonum/stat/distuv"
)

// Family is the distribution that a measured value carries.
type Family string

const (
	StudentT   Family = "t"      // means, slopes
	ChiSquared Family = "chi"    // standard deviations, Allan-type deviations
	Sampled    Family = "sample" // quantiles of a seeded propagation
	Bound      Family = "bound"  // one-sided
)

// coverage of the interval that every figure states.
const coverage = 0.95

// Line is one entry of an uncertainty budget; the squares of the contributions add up to the square of U.
type Line struct {
	Name         string  // "white noise", "table rate"
	Instrument   string  // "" for a statistical part, else the source that gyros and figures of a run share: "T1 table.rate"
	Value, U     float64 // of the input, in the input's unit
	Sensitivity  float64 // change of the figure a unit of the input
	Contribution float64 // |Sensitivity| * U, in the figure's unit
	DoF          float64 // may be +Inf
}

// Measured is a value with its uncertainty, its distribution and its budget. Numbers are in Unit.
type Measured struct {
	Value, U, DoF float64 // DoF may be +Inf
	Low, High     float64 // the 95 % interval
	Unit          Unit
	Family        Family
	Budget        []Line
	Scale, Shift  float64   // chi: the raw deviation s, and the variance w^2 that noise alone makes of it
	Draws         []float64 // sample, and bounds found by propagation: the draws, sorted
	Upper         bool      // bound: the truth lies at or below High; it can meet an upper limit, never miss one
	Void          string    // why it was not measured; every number is NaN then
}

// T makes a value with a Student t distribution.
//
//	u^2 = sum c_i^2,  nu = u^4 / sum (c_i^4 / nu_i),  interval: value +- t_0.975(nu) u
//
// Source: JCGM 100:2008, 5.1.2 and G.4.1 (Welch-Satterthwaite).
func T(value float64, unit Unit, budget []Line) Measured {
	m := Measured{Value: value, Unit: unit, Family: StudentT, Budget: budget}
	m.U, m.DoF = combine(budget)
	m.Low, m.High = m.Interval(coverage)
	return m
}

// combine gives the root sum of squares and the effective degrees of freedom.
func combine(budget []Line) (u, dof float64) {
	var square, quarter float64
	for _, l := range budget {
		c2 := l.Contribution * l.Contribution
		square += c2
		if !math.IsInf(l.DoF, 1) {
			quarter += c2 * c2 / l.DoF
		}
	}
	dof = math.Inf(1)
	if quarter > 0 {
		dof = square * square / quarter
	}
	return math.Sqrt(square), dof
}

// Chi makes a deviation from a raw sample deviation s of dof degrees of freedom, in which noise alone makes the
// variance shift = w^2.
//
//	value = sqrt(max(s^2 - w^2, 0)),  bound^2 = max(dof s^2 / chi2 - w^2, 0)
//
// u is s^2 / (value sqrt(2 dof)), and no more than half the interval's width over 1.96 where the shift eats most of
// s^2 (the expansion has no meaning there). extra lines (shares of instruments, relative to the figure) widen u.
// Source: JCGM 100:2008, E.4.3 for the uncertainty of a deviation; the chi-square interval of a variance.
func Chi(s, shift, dof float64, unit Unit, extra []Line) Measured {
	m := Measured{Value: math.Sqrt(math.Max(s*s-shift, 0)), Unit: unit, Family: ChiSquared, Scale: s, Shift: shift, DoF: dof}
	m.Low, m.High = m.Interval(coverage)
	u := (m.High - m.Low) / (2 * normalQuantile(0.5+coverage/2))
	if m.Value > 0 {
		u = math.Min(u, s*s/(m.Value*math.Sqrt(2*dof)))
	}
	m.Budget = append([]Line{{Name: "scatter", Value: s, U: u, Sensitivity: 1, Contribution: u, DoF: dof}}, extra...)
	m.U, _ = combine(m.Budget)
	return m
}

// Sample makes a value from the draws of a propagation; it sorts them. The interval holds 95 % of the draws, 2.5 % on
// each side. Source: JCGM 101:2008, 7.6 and 7.7.
func Sample(draws []float64, value float64, unit Unit, budget []Line) Measured {
	slices.Sort(draws)
	m := Measured{Value: value, Unit: unit, Family: Sampled, Draws: draws, DoF: math.Inf(1), Budget: budget}
	var mean, square float64
	for _, d := range draws {
		mean += d
	}
	mean /= float64(len(draws))
	for _, d := range draws {
		square += (d - mean) * (d - mean)
	}
	m.U = math.Sqrt(square / float64(len(draws)-1))
	m.Low, m.High = m.Interval(coverage)
	return m
}

// Voided makes a figure that was not measured, with the reason.
func Voided(unit Unit, reason string) Measured {
	n := math.NaN()
	return Measured{Value: n, U: n, DoF: n, Low: n, High: n, Unit: unit, Void: reason}
}

// Interval is the symmetric-in-probability interval that holds the truth with probability p; of a bound, all from zero
// to the quantile of p.
func (m Measured) Interval(p float64) (low, high float64) {
	if m.Family == Bound && m.Void == "" {
		return 0, m.Quantile(p)
	}
	return m.Quantile(0.5 - p/2), m.Quantile(0.5 + p/2)
}

// CDF is P(truth <= x | what was measured).
func (m Measured) CDF(x float64) float64 {
	switch {
	case m.Void != "":
		return math.NaN()
	case m.Family == ChiSquared:
		// truth <= x  <=>  chi2 >= dof s^2 / (x^2 + w^2)
		if x < 0 {
			return 0
		}
		if m.Scale == 0 {
			return 1
		}
		bound := x*x + m.Shift
		if bound == 0 {
			return 0
		}
		return distuv.ChiSquared{K: m.DoF}.Survival(m.DoF * m.Scale * m.Scale / bound)
	case len(m.Draws) > 0:
		return m.sampledCDF(x)
	case m.Family == Bound: // half a normal distribution from zero
		return math.Max(0, 2*distuv.UnitNormal.CDF(x/m.U)-1)
	case m.U == 0:
		if x < m.Value {
			return 0
		}
		return 1
	}
	return studentCDF((x-m.Value)/m.U, m.DoF)
}

// Quantile is the x with CDF(x) = p.
func (m Measured) Quantile(p float64) float64 {
	switch {
	case m.Void != "":
		return math.NaN()
	case m.Family == ChiSquared:
		if m.Scale == 0 {
			return 0
		}
		chi2 := chiQuantile(1-p, m.DoF)
		return math.Sqrt(math.Max(m.DoF*m.Scale*m.Scale/chi2-m.Shift, 0))
	case len(m.Draws) > 0:
		return m.sampledQuantile(p)
	case m.Family == Bound:
		return m.U * normalQuantile(0.5+p/2)
	case m.U == 0:
		return m.Value
	}
	return m.Value + m.U*studentQuantile(p, m.DoF)
}

// chiQuantile is the quantile of chi square; p may be as small as 1e-9.
func chiQuantile(p, dof float64) float64 { return distuv.ChiSquared{K: dof}.Quantile(p) }

// manyDoF is where Student's t and the normal distribution agree to 1e-7 and gonum's t loses digits.
const manyDoF = 1e6

func studentCDF(t, dof float64) float64 {
	if dof > manyDoF {
		return distuv.UnitNormal.CDF(t)
	}
	return distuv.StudentsT{Mu: 0, Sigma: 1, Nu: dof}.CDF(t)
}

func studentQuantile(p, dof float64) float64 {
	if dof > manyDoF {
		return normalQuantile(p)
	}
	return distuv.StudentsT{Mu: 0, Sigma: 1, Nu: dof}.Quantile(p)
}

func normalQuantile(p float64) float64 { return distuv.UnitNormal.Quantile(p) }

// sampledQuantile interpolates between the draws, the i-th of n standing at (i+1/2)/n, and follows a normal tail
// fitted through the outermost thirtieth of the draws beyond them.
func (m Measured) sampledQuantile(p float64) float64 {
	n := len(m.Draws)
	at := p*float64(n) - 0.5
	switch {
	case at <= 0:
		centre, spread := m.tail(false)
		return math.Min(m.Draws[0], centre+spread*normalQuantile(p))
	case at >= float64(n-1):
		centre, spread := m.tail(true)
		return math.Max(m.Draws[n-1], centre+spread*normalQuantile(p))
	}
	i := int(at)
	return m.Draws[i] + (at-float64(i))*(m.Draws[i+1]-m.Draws[i])
}

func (m Measured) sampledCDF(x float64) float64 {
	n := len(m.Draws)
	switch {
	case x < m.Draws[0], x >= m.Draws[n-1]:
		high := x >= m.Draws[n-1]
		centre, spread := m.tail(high)
		if spread == 0 {
			if high {
				return 1
			}
			return 0
		}
		p := distuv.UnitNormal.CDF((x - centre) / spread)
		if high {
			return math.Max(p, 1-0.5/float64(n))
		}
		return math.Min(p, 0.5/float64(n))
	}
	i := sort.Search(n, func(i int) bool { return m.Draws[i] > x }) // Draws[i-1] <= x < Draws[i]
	part := 0.0
	if d := m.Draws[i] - m.Draws[i-1]; d > 0 {
		part = (x - m.Draws[i-1]) / d
	}
	return (float64(i-1) + part + 0.5) / float64(n)
}

// tail is the normal distribution through the draws' quantiles at 1/30 and 1/1000 (or what there is) of one side.
func (m Measured) tail(high bool) (centre, spread float64) {
	n := len(m.Draws)
	outer, inner := n/1000, n/30
	if inner == outer {
		inner = n / 2
	}
	pOuter, pInner := (float64(outer)+0.5)/float64(n), (float64(inner)+0.5)/float64(n)
	if high {
		outer, inner, pOuter, pInner = n-1-outer, n-1-inner, 1-pOuter, 1-pInner
	}
	zOuter, zInner := normalQuantile(pOuter), normalQuantile(pInner)
	if zOuter == zInner {
		return m.Draws[outer], 0
	}
	spread = (m.Draws[outer] - m.Draws[inner]) / (zOuter - zInner)
	return m.Draws[outer] - spread*zOuter, spread
}

// To gives the same measured value in another unit of its dimension.
func (m Measured) To(u Unit) (Measured, error) {
	if m.Unit.Dimension() != u.Dimension() {
		return Measured{}, &UnitError{Text: m.Unit.String(), Got: m.Unit, Want: u.Dimension(), Fits: u.Dimension().Units()}
	}
	c := convert(m.Unit.def(), u.def())
	for _, x := range []*float64{&m.Value, &m.U, &m.Low, &m.High, &m.Scale} {
		*x = c.of(*x)
	}
	m.Shift = c.of(c.of(m.Shift))
	m.Unit = u
	m.Draws = slices.Clone(m.Draws)
	for i := range m.Draws {
		m.Draws[i] = c.of(m.Draws[i])
	}
	m.Budget = slices.Clone(m.Budget)
	for i := range m.Budget {
		m.Budget[i].Sensitivity = c.of(m.Budget[i].Sensitivity)
		m.Budget[i].Contribution = c.of(m.Budget[i].Contribution)
	}
	return m, nil
}

// String shows value and u with the digits that u supports.
func (m Measured) String() string {
	if m.Void != "" {
		return "void: " + m.Void
	}
	unit := ""
	if m.Unit.def() != one {
		unit = " " + m.Unit.String()
	}
	if m.U == 0 {
		return Format(m.Value, 0) + unit
	}
	return fmt.Sprintf("%s%s, u %s%s", Format(m.Value, m.U), unit, Format(m.U, m.U), unit)
}

// Format shows x with the digits that the uncertainty u supports: those of two significant digits of u. Without an
// uncertainty it shows six significant digits.
func Format(x, u float64) string {
	switch {
	case math.IsNaN(x):
		return "-"
	case math.IsInf(x, 0):
		return strconv.FormatFloat(x, 'g', -1, 64)
	case !(u > 0) || math.IsInf(u, 0):
		return strconv.FormatFloat(x, 'g', 6, 64)
	}
	place := int(math.Floor(math.Log10(u))) - 1 // of the last digit shown
	if place > 0 {
		p := math.Pow10(place)
		return strconv.FormatFloat(math.Round(x/p)*p, 'f', 0, 64)
	}
	if -place > 12 {
		return strconv.FormatFloat(x, 'e', 3, 64)
	}
	return strconv.FormatFloat(x, 'f', -place, 64)
}
