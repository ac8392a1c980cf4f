package limits

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/stat/distuv"

	"proofrate/limits/quantity"
)

// Draws of a propagation. Source of the adaptive number: JCGM 101:2008, 7.9, with the threshold of the rule as what
// has to be told apart.
const (
	drawsFirst = 2000
	drawsMax   = 10_000_000
	apart      = 4 // standard errors
)

// near says that p cannot be told from a threshold of the rule with so many draws.
func near(p float64, draws int, rule Rule) bool {
	// At p = 0 or 1 the estimate of the standard error vanishes; half a draw keeps it honest.
	q := (p*float64(draws) + 0.5) / (float64(draws) + 1)
	se := math.Sqrt(q * (1 - q) / float64(draws))
	return math.Abs(p-rule.accept) < apart*se || math.Abs(p-rule.reject) < apart*se
}

// propagate estimates the probability that the requirement holds.
func (l *Limit) propagate(values Values, element string, uses []use, rule Rule, seed uint64) (p float64, draws int) {
	d := newDrawer(values, uses, seed)
	met := 0
	for target := drawsFirst; ; target = min(2*target, drawsMax) {
		for ; draws < target; draws++ {
			d.draw()
			if l.root.holds(values, element, d.look) {
				met++
			}
		}
		p = float64(met) / float64(draws)
		if draws >= drawsMax || !near(p, draws, rule) {
			return p, draws
		}
	}
}

// drawer draws a set of measured values again and again.
//
// Each element has its own distribution; elements that lean on a shared instrument are correlated by a normal copula:
//
//	z = sqrt(1 - sum r_k^2) z_own + sum r_k z_k,   x = Q(Phi(z)),   r_k = signed contribution of instrument k / u
//
// so that every x keeps its own distribution and the instrument's part is drawn once for all.
type drawer struct {
	random *rand.Rand
	parts  []part
	shared []float64 // of this draw
	now    map[use]float64
}

type part struct {
	use
	measured quantity.Measured
	own      float64
	shares   []share
}

type share struct {
	instrument int
	r          float64
}

// drawStream tells the streams of this package from others of the same seed.
const drawStream = 0x6c696d697473 // "limits"

func newDrawer(values Values, uses []use, seed uint64) *drawer {
	d := &drawer{random: rand.New(rand.NewPCG(seed, drawStream)), now: map[use]float64{}}
	known := map[string]int{}
	for _, u := range uses {
		m, _ := find(values, u)
		p := part{use: u, measured: m, own: 1}
		for _, l := range m.Budget {
			if l.Instrument == "" || m.U == 0 {
				continue
			}
			i, ok := known[l.Instrument]
			if !ok {
				i = len(known)
				known[l.Instrument] = i
			}
			r := math.Copysign(l.Contribution, l.Sensitivity) / m.U
			p.own -= r * r
			p.shares = append(p.shares, share{i, r})
		}
		p.own = math.Sqrt(math.Max(p.own, 0))
		d.parts = append(d.parts, p)
	}
	d.shared = make([]float64, len(known))
	return d
}

// draw makes the next set.
func (d *drawer) draw() {
	for i := range d.shared {
		d.shared[i] = d.random.NormFloat64()
	}
	for _, p := range d.parts {
		z := p.own * d.random.NormFloat64()
		for _, s := range p.shares {
			z += s.r * d.shared[s.instrument]
		}
		if p.measured.Family == quantity.StudentT && p.measured.DoF > manyDoF {
			d.now[p.use] = p.measured.Value + p.measured.U*z
			continue
		}
		d.now[p.use] = p.measured.Quantile(distuv.UnitNormal.CDF(z))
	}
}

// manyDoF is where Student's t and the normal distribution differ by less than a thousandth of u at 95 %.
const manyDoF = 2000

func (d *drawer) look(figure, element string) float64 { return d.now[use{figure, element}] }

// formulaDraws is how many draws carry a formula's distribution.
const formulaDraws = 2000

// Evaluate computes a formula's figure for every element of its series, or once: the value from the values, the
// distribution by propagation with draws from seed. A void figure gives a void figure.
func (f *Formula) Evaluate(values Values, unit quantity.Unit, seed uint64) []Element {
	if f.root.labels == "" {
		return []Element{{"", f.evaluate(values, "", unit, seed)}}
	}
	var list []Element
	for i, element := range f.root.elements(values) {
		list = append(list, Element{element, f.evaluate(values, element, unit, seed+uint64(i))})
	}
	return list
}

func (f *Formula) evaluate(values Values, element string, unit quantity.Unit, seed uint64) quantity.Measured {
	uses := f.root.uses(values, element, nil)
	if reason := missing(values, uses); reason != "" {
		return quantity.Voided(unit, reason)
	}
	compute := func(look lookup) float64 { return f.root.value(values, element, look) }
	value := compute(measuredAt(values))
	if !finite(value) {
		return quantity.Voided(unit, "the formula gives no finite number; "+with(values, uses))
	}
	d := newDrawer(values, uses, seed)
	draws := make([]float64, formulaDraws)
	for i := range draws {
		d.draw()
		draws[i] = compute(d.look)
		if !finite(draws[i]) {
			return quantity.Voided(unit, "the formula is not finite within the uncertainty of its figures; "+with(values, uses))
		}
	}
	var budget []quantity.Line
	for _, u := range uses {
		m, _ := find(values, u)
		if m.U == 0 {
			continue
		}
		slope := derivative(values, u, m.U, compute)
		name := u.figure
		if u.element != "" {
			name += " at " + u.element
		}
		budget = append(budget, quantity.Line{Name: name, Value: m.Value, U: m.U, Sensitivity: slope, Contribution: math.Abs(slope) * m.U, DoF: m.DoF})
	}
	return quantity.Sample(draws, value, unit, budget)
}
