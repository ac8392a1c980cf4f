package quantity

import (
	"errors"
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"
)

// Value is a number in a unit. The zero Value is the ratio 0.
type Value struct {
	Number float64
	Unit   Unit
}

// Of makes a Value.
func Of(number float64, unit Unit) Value { return Value{number, unit} }

// FromSI gives an SI number (rad, s, degC for absolute temperatures, K, V, A, Hz, m/s^2) in unit u.
func FromSI(x float64, u Unit) Value { return Value{convert(one, u.def()).of(x), u} }

// UnitError says that a unit does not fit where it stands.
type UnitError struct {
	Text string // as it was written
	Got  Unit
	Want Dimension
	Fits []Unit
}

func (e *UnitError) Error() string {
	return fmt.Sprintf("%q is in %s, %s was expected%s", e.Text, kindOf(e.Got), article(e.Want.String()), fits(e.Fits))
}

func kindOf(u Unit) string {
	if u.Dimension() == Ratio {
		return u.String() + " (a ratio)"
	}
	return fmt.Sprintf("%s (%s)", u, article(u.Dimension().String()))
}

func article(noun string) string {
	if strings.ContainsRune("aeiou", rune(noun[0])) {
		return "an " + noun
	}
	return "a " + noun
}

func fits(units []Unit) string {
	if len(units) == 0 {
		return ""
	}
	names := make([]string, len(units))
	for i, u := range units {
		names[i] = u.String()
	}
	return "; units that fit: " + strings.Join(names, ", ")
}

var numberPattern = regexp.MustCompile(`^[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?`)

// valueTextMax bounds what a value or a list of values may be written with.
const valueTextMax = 4096

// number takes a leading number off text.
func number(text string) (x float64, rest string, err error) {
	found := numberPattern.FindString(text)
	if found == "" {
		return 0, text, errors.New("a number is missing")
	}
	x, err = strconv.ParseFloat(found, 64)
	if err != nil {
		return 0, text, fmt.Errorf("%s is beyond what a number can be", found)
	}
	return x, strings.TrimLeft(text[len(found):], " "), nil
}

// Parse reads a number with its unit, or several of one dimension that add up ("1 h 30 min" is 90 min). A bare number
// is a ratio.
func Parse(text string) (Value, error) {
	var sum Value
	rest := strings.TrimSpace(text)
	if len(rest) > valueTextMax {
		return Value{}, fmt.Errorf("a quantity has at most %d characters", valueTextMax)
	}
	for part := 0; part == 0 || rest != ""; part++ {
		x, after, err := number(rest)
		if err != nil {
			return Value{}, fmt.Errorf("%q is no quantity: %w; expected a number with its unit, such as 30 deg/s", text, err)
		}
		unitText := after
		if i := strings.IndexAny(after, " "); i >= 0 {
			if next := strings.TrimLeft(after[i:], " "); numberPattern.MatchString(next) {
				unitText, after = after[:i], next
			} else {
				after = ""
			}
		} else {
			after = ""
		}
		unit := Unit{one}
		if unitText != "" {
			if unit, err = ParseUnit(unitText); err != nil {
				return Value{}, fmt.Errorf("%q: %w", text, err)
			}
		}
		v := Value{x, unit}
		if part > 0 {
			if v.Dimension() != sum.Dimension() || v.Dimension() == Temperature || x < 0 {
				return Value{}, fmt.Errorf("%q: its parts do not add up; expected one unit, or parts such as 1 h 30 min", text)
			}
			v.Number += sum.As(unit)
		}
		sum, rest = v, after
	}
	return sum, nil
}

// ParseAs is Parse with the dimension that is expected; another one is a *UnitError.
func ParseAs(text string, want Dimension) (Value, error) {
	v, err := Parse(text)
	if err != nil {
		return Value{}, err
	}
	if v.Dimension() != want {
		return Value{}, &UnitError{Text: text, Got: v.Unit, Want: want, Fits: want.Units()}
	}
	return v, nil
}

// ParseList reads numbers and then the one unit of all: "23 -40 23 degC".
func ParseList(text string) ([]Value, error) {
	rest := strings.TrimSpace(text)
	if len(rest) > valueTextMax {
		return nil, fmt.Errorf("a list of quantities has at most %d characters", valueTextMax)
	}
	var numbers []float64
	for numberPattern.MatchString(rest) {
		x, after, err := number(rest)
		if err != nil {
			return nil, fmt.Errorf("%q: %w", text, err)
		}
		numbers, rest = append(numbers, x), after
	}
	if len(numbers) == 0 {
		return nil, fmt.Errorf("%q is no list of quantities; expected numbers and then their unit, such as -40 23 71 degC", text)
	}
	unit := Unit{one}
	if rest != "" {
		var err error
		if unit, err = ParseUnit(rest); err != nil {
			return nil, fmt.Errorf("%q: %w", text, err)
		}
	}
	values := make([]Value, len(numbers))
	for i, x := range numbers {
		values[i] = Value{x, unit}
	}
	return values, nil
}

// Dimension of the value.
func (v Value) Dimension() Dimension { return v.Unit.Dimension() }

// In gives the number in unit u, exactly where the definition is exact.
func (v Value) In(u Unit) (float64, error) {
	if v.Unit.def() == u.def() {
		return v.Number, nil
	}
	if v.Dimension() != u.Dimension() {
		return 0, &UnitError{Text: v.String(), Got: v.Unit, Want: u.Dimension(), Fits: u.Dimension().Units()}
	}
	return convert(v.Unit.def(), u.def()).of(v.Number), nil
}

// As is In where the dimension is known to fit; another one is a fault of the program, and it panics.
func (v Value) As(u Unit) float64 {
	x, err := v.In(u)
	if err != nil {
		panic("quantity: " + err.Error())
	}
	return x
}

// SI gives the number in rad, m, kg, s, A, K and their products; an absolute temperature in degC.
func (v Value) SI() float64 { return convert(v.Unit.def(), one).of(v.Number) }

// String is the shortest number that reads back the same, and the unit.
func (v Value) String() string {
	text := strconv.FormatFloat(v.Number, 'g', -1, 64)
	if math.Abs(v.Number) < 1e15 && math.Abs(v.Number) >= 1e-4 || v.Number == 0 {
		text = strconv.FormatFloat(v.Number, 'f', -1, 64)
	}
	if v.Unit.def() == one {
		return text
	}
	return text + " " + v.Unit.String()
}

// Same says that two values are the same nominal one: equal after conversion to within 1e-12.
func (v Value) Same(w Value) bool {
	if v.Dimension() != w.Dimension() {
		return false
	}
	a, b := v.SI(), w.SI()
	return a == b || math.Abs(a-b) <= 1e-12*math.Max(math.Abs(a), math.Abs(b))
}

// Add adds w; an absolute temperature takes a difference.
func (v Value) Add(w Value) (Value, error) {
	switch {
	case v.Dimension() == Temperature && w.Dimension() == TemperatureDifference:
		return Value{v.Number + w.SI(), v.Unit}, nil
	case v.Dimension() == Temperature && w.Dimension() == Temperature:
		return Value{}, fmt.Errorf("%s + %s: two absolute temperatures do not add up; a difference is in K", v, w)
	}
	x, err := w.In(v.Unit)
	return Value{v.Number + x, v.Unit}, err
}

// Sub subtracts w; two absolute temperatures leave a difference in K.
func (v Value) Sub(w Value) (Value, error) {
	switch {
	case v.Dimension() == Temperature && w.Dimension() == Temperature:
		return Value{v.Number - w.Number, MustUnit("K")}, nil
	case v.Dimension() == Temperature && w.Dimension() == TemperatureDifference:
		return Value{v.Number - w.SI(), v.Unit}, nil
	}
	x, err := w.In(v.Unit)
	return Value{v.Number - x, v.Unit}, err
}
