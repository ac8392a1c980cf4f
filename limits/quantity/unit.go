package quantity

import (
	"fmt"
	"math"
	"math/big"
	"strconv"
	"strings"
	"sync"
)

// Unit is a unit of measure. It compares with ==; two spellings of one unit are two units that convert into each
// other. The zero Unit is the ratio 1.
type Unit struct{ d *definition }

// definition: one unit is sqrt(square) * pi^pi of the base unit of its dimension (rad, m, kg, s, A, K or degC).
type definition struct {
	symbol    string
	dimension Dimension
	square    *big.Rat // of the rational factor, so that sqrt(h) stays exact
	pi        int      // power of pi, in halves
}

var one = &definition{symbol: "1", square: big.NewRat(1, 1)}

func (u Unit) def() *definition {
	if u.d == nil {
		return one
	}
	return u.d
}

// String is the unit as it was written.
func (u Unit) String() string { return u.def().symbol }

// Dimension of the unit.
func (u Unit) Dimension() Dimension { return u.def().dimension }

// atoms is the table of unit names. Factors are exact: NIST SP 811 and the SI Brochure; g0 = 9.80665 m/s^2 by
// definition of standard gravity (3rd CGPM, 1901).
var atoms = map[string]*definition{}

func init() {
	type row struct {
		symbol    string
		dimension Dimension
		factor    string
		pi        int
	}
	for _, r := range []row{
		{"1", Ratio, "1", 0}, {"%", Ratio, "1/100", 0}, {"ppm", Ratio, "1/1000000", 0},
		{"rad", Angle, "1", 0}, {"mrad", Angle, "1/1000", 0}, {"urad", Angle, "1/1000000", 0},
		{"deg", Angle, "1/180", 2}, {"arcmin", Angle, "1/10800", 2}, {"arcsec", Angle, "1/648000", 2}, {"turn", Angle, "2", 2},
		{"s", Time, "1", 0}, {"ms", Time, "1/1000", 0}, {"us", Time, "1/1000000", 0}, {"min", Time, "60", 0}, {"h", Time, "3600", 0}, {"d", Time, "86400", 0},
		{"Hz", Frequency, "1", 0}, {"kHz", Frequency, "1000", 0}, {"MHz", Frequency, "1000000", 0},
		{"m", Length, "1", 0}, {"mm", Length, "1/1000", 0}, {"cm", Length, "1/100", 0}, {"um", Length, "1/1000000", 0}, {"nm", Length, "1/1000000000", 0}, {"km", Length, "1000", 0},
		{"g0", Acceleration, "980665/100000", 0},
		{"degC", Temperature, "1", 0}, {"K", TemperatureDifference, "1", 0}, {"mK", TemperatureDifference, "1/1000", 0},
		{"V", Voltage, "1", 0}, {"mV", Voltage, "1/1000", 0}, {"uV", Voltage, "1/1000000", 0}, {"kV", Voltage, "1000", 0},
		{"A", Current, "1", 0}, {"mA", Current, "1/1000", 0}, {"uA", Current, "1/1000000", 0},
		{"ohm", Resistance, "1", 0}, {"kohm", Resistance, "1000", 0}, {"Mohm", Resistance, "1000000", 0},
		{"kg", Dimension{mass: 2}, "1", 0},
	} {
		f, ok := new(big.Rat).SetString(r.factor)
		if !ok {
			panic("quantity: factor of " + r.symbol)
		}
		atoms[r.symbol] = &definition{r.symbol, r.dimension, new(big.Rat).Mul(f, f), r.pi}
	}
	interned.Store(one.symbol, one) // so that "1" is the zero Unit
}

var interned sync.Map // symbol -> *definition

// unitTextMax bounds what a unit may be written with.
const unitTextMax = 64

// ParseUnit reads a unit: names, products (*), quotients (/, from left to right), whole powers (^), sqrt() and
// parentheses, as in deg/h/K, mV/(deg/s), m/s^2 and deg/sqrt(h).
func ParseUnit(text string) (Unit, error) {
	text = strings.TrimSpace(text)
	if d, ok := interned.Load(text); ok {
		return Unit{d.(*definition)}, nil
	}
	if len(text) > unitTextMax {
		return Unit{}, fmt.Errorf("unit %q... is too long; a unit has at most %d characters", text[:20], unitTextMax)
	}
	p := unitParser{text: text}
	d, err := p.product()
	if err == nil && p.at < len(text) {
		err = fmt.Errorf("unexpected %q", text[p.at:])
	}
	if err != nil {
		return Unit{}, fmt.Errorf("unit %q: %w", text, err)
	}
	d.symbol = text
	kept, _ := interned.LoadOrStore(text, d)
	return Unit{kept.(*definition)}, nil
}

// MustUnit is ParseUnit for constants.
func MustUnit(text string) Unit {
	u, err := ParseUnit(text)
	if err != nil {
		panic("quantity: " + err.Error())
	}
	return u
}

type unitParser struct {
	text string
	at   int
}

func (p *unitParser) skip() {
	for p.at < len(p.text) && p.text[p.at] == ' ' {
		p.at++
	}
}

func (p *unitParser) next(c byte) bool {
	p.skip()
	if p.at < len(p.text) && p.text[p.at] == c {
		p.at++
		return true
	}
	return false
}

func (p *unitParser) product() (*definition, error) {
	d, err := p.factor()
	for err == nil {
		sign := 0
		switch {
		case p.next('/'):
			sign = -2
		case p.next('*'):
			sign = 2
		default:
			return d, nil
		}
		var right *definition
		if right, err = p.factor(); err == nil {
			d, err = d.times(right, sign)
		}
	}
	return nil, err
}

func (p *unitParser) factor() (*definition, error) {
	d, err := p.atom()
	if err != nil || !p.next('^') {
		return d, err
	}
	p.skip()
	start := p.at
	for p.at < len(p.text) && (p.text[p.at] == '-' || p.text[p.at] >= '0' && p.text[p.at] <= '9') {
		p.at++
	}
	n, err := strconv.Atoi(p.text[start:p.at])
	if err != nil || n == 0 || n > 4 || n < -4 {
		return nil, fmt.Errorf("a power is a whole number from -4 to 4")
	}
	return one.times(d, 2*n)
}

func (p *unitParser) atom() (*definition, error) {
	if p.next('(') {
		return p.closed()
	}
	p.skip()
	start := p.at
	for p.at < len(p.text) && (isLetter(p.text[p.at]) || p.at > start && p.text[p.at] >= '0' && p.text[p.at] <= '9' || p.text[p.at] == '%') {
		p.at++
	}
	if p.at == start && p.at < len(p.text) && p.text[p.at] == '1' {
		p.at++
	}
	name := p.text[start:p.at]
	if name == "sqrt" && p.next('(') {
		d, err := p.closed()
		if err != nil {
			return nil, err
		}
		return one.times(d, 1)
	}
	if d, ok := atoms[name]; ok {
		copied := *d
		return &copied, nil
	}
	if name == "" {
		return nil, fmt.Errorf("a unit name is missing")
	}
	return nil, fmt.Errorf("%q is no unit that is known here", name)
}

func (p *unitParser) closed() (*definition, error) {
	d, err := p.product()
	if err == nil && !p.next(')') {
		err = fmt.Errorf("a ) is missing")
	}
	return d, err
}

func isLetter(c byte) bool { return c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' }

// times multiplies by o to the power halves/2.
func (d *definition) times(o *definition, halves int) (*definition, error) {
	if o.dimension.absolute || d.dimension.absolute {
		return nil, fmt.Errorf("degC is an absolute temperature and stands alone; a difference or a rate is in K")
	}
	for _, e := range []int8{o.dimension.angle, o.dimension.length, o.dimension.mass, o.dimension.time, o.dimension.current, o.dimension.temperature, int8(o.pi)} {
		if int(e)*halves%2 != 0 || int(e)*halves > 60 || int(e)*halves < -60 {
			return nil, fmt.Errorf("a root of a root, or a power beyond all use")
		}
	}
	// square^(halves/2) is rational for whole powers; for a root it is the square itself that is square-rooted.
	factor, err := ratPower(o.square, halves)
	if err != nil {
		return nil, err
	}
	return &definition{dimension: d.dimension.times(o.dimension.power(halves)), square: factor.Mul(factor, d.square), pi: d.pi + o.pi*halves/2}, nil
}

// ratPower is r^(halves/2).
func ratPower(r *big.Rat, halves int) (*big.Rat, error) {
	base := new(big.Rat).Set(r)
	if halves < 0 {
		base.Inv(base)
		halves = -halves
	}
	if halves%2 == 1 {
		root, ok := exactRoot(base)
		if !ok {
			return nil, fmt.Errorf("its root cannot be held")
		}
		base, halves = root, 2*halves
	}
	result := big.NewRat(1, 1)
	for range halves / 2 {
		result.Mul(result, base)
	}
	return result, nil
}

// exactRoot is the square root of a rational if that is rational.
func exactRoot(r *big.Rat) (*big.Rat, bool) {
	n, d := new(big.Int).Sqrt(r.Num()), new(big.Int).Sqrt(r.Denom())
	root := new(big.Rat).SetFrac(n, d)
	return root, new(big.Rat).Mul(root, root).Cmp(r) == 0
}

// conversion is number * numerator / denominator * pi^pi, the first two exact.
type conversion struct{ numerator, denominator, pi float64 }

var conversions sync.Map // [2]*definition -> conversion

func convert(from, to *definition) conversion {
	key := [2]*definition{from, to}
	if c, ok := conversions.Load(key); ok {
		return c.(conversion)
	}
	ratio := new(big.Rat).Quo(from.square, to.square)
	c := conversion{pi: math.Pow(math.Pi, float64(from.pi-to.pi)/2)}
	if root, ok := exactRoot(ratio); ok {
		c.numerator, _ = new(big.Float).SetInt(root.Num()).Float64()
		c.denominator, _ = new(big.Float).SetInt(root.Denom()).Float64()
	} else {
		square, _ := ratio.Float64()
		c.numerator, c.denominator = math.Sqrt(square), 1
	}
	conversions.Store(key, c)
	return c
}

func (c conversion) of(x float64) float64 {
	x = float64(x*c.numerator) / c.denominator
	if c.pi != 1 {
		x *= c.pi
	}
	return x
}
