// Package quantity holds the units of measure of the gyro trade, values with units, and measured values.
//
// A Dimension is a product of powers of angle, length, mass, time, current and temperature; an absolute temperature is
// a dimension of its own beside the temperature difference. Powers are counted in halves, for deg/sqrt(h): gonum's unit
// package holds whole ones only, so the table is ours. A Unit is what people write; a Value is a number in a unit; a
// Measured is a value with its uncertainty, its distribution and the budget behind it.
//
// Invariants: a conversion is exact where the definition is (1 deg/s is 3600 deg/h to the last bit); degC is always
// absolute and K always a difference; inside the program numbers are SI with angles in radians and absolute
// temperatures in degC.
//
//	v, err := quantity.Parse("0.05 deg/h")
//	radPerS := v.SI()
package quantity
