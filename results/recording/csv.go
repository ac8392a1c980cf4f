package recording

import (
	"bufio"
	"bytes"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"proofrate/limits/quantity"
)

// csvBytesMax bounds what ReadCSV takes in: 2 GiB is a hundred million samples of twenty characters.
const csvBytesMax = 2 << 30

// CSVOptions say how a file of rates is to be read.
type CSVOptions struct {
	Column         string        // heading of the column; "" where the file leaves no choice
	Unit           quantity.Unit // of the numbers
	SampleInterval float64       // s
}

// ReadCSV reads a recording that was made elsewhere: one sample a line, in a column of decimal numbers.
//
// Lines that start with # are passed over, as are empty ones before and after the samples; a first line that holds no number is a heading. Columns are
// parted by comma, semicolon or tab. The column is the one named in the options, else the only one, else the one
// headed "rate".
//
// The numbers are kept as decimal mantissas with one exponent, so that sums over them are exact.
//
// Errors name file and line: no samples, a single sample, a missing, empty, non-finite or textual value, a changing
// number of columns. A gap is never bridged.
func ReadCSV(name string, from io.Reader, o CSVOptions) (*Recording, error) {
	lines := bufio.NewScanner(io.LimitReader(from, csvBytesMax))
	lines.Buffer(make([]byte, 0, 64<<10), 1<<20)
	c := csvColumn{name: name, want: o.Column, at: -1}
	for n := 1; lines.Scan(); n++ {
		line := bytes.TrimSpace(bytes.TrimPrefix(lines.Bytes(), []byte("\xef\xbb\xbf")))
		if len(line) == 0 {
			c.empty(n)
			continue
		}
		if line[0] == '#' {
			continue
		}
		if bytes.IndexByte(line, 0) >= 0 {
			return nil, fmt.Errorf("%s:%d: a NUL byte: this is a binary file; expected text, a number a line", name, n)
		}
		if err := c.line(n, string(line)); err != nil {
			return nil, err
		}
	}
	if err := lines.Err(); err != nil {
		return nil, fmt.Errorf("%s: %w; expected text, a number a line", name, err)
	}
	switch len(c.numbers) {
	case 0:
		return nil, fmt.Errorf("%s: no sample; expected a column of rates, a number a line", name)
	case 1:
		return nil, fmt.Errorf("%s: one sample only; every figure needs more", name)
	}
	counts, exponent := c.mantissas()
	count := quantity.Of(math.Pow10(exponent), o.Unit)
	return &Recording{
		Section: Section{Name: name, Step: "read from a file", SincePowerOn: math.NaN(), SampleInterval: o.SampleInterval,
			Channels: []Channel{{Name: "rate", Count: count}}},
		Counts:  [][]int64{counts},
		Quality: Quality{Complete: true},
	}, nil
}

// csvColumn gathers one column.
type csvColumn struct {
	name, want string
	separator  string
	width      int // columns; 0: no line yet
	at         int // which is read
	numbers    []decimal
	gap        int // line of the first empty line since the last sample; 0: none
}

// empty notes an empty line: between samples it is a gap.
func (c *csvColumn) empty(n int) {
	if len(c.numbers) > 0 && c.gap == 0 {
		c.gap = n
	}
}

func (c *csvColumn) line(n int, text string) error {
	if c.width == 0 {
		for _, separator := range []string{"\t", ";", ","} {
			if strings.Contains(text, separator) {
				c.separator = separator
				break
			}
		}
	}
	cells := []string{text}
	if c.separator != "" {
		cells = strings.Split(text, c.separator)
	}
	for i := range cells {
		cells[i] = strings.Trim(strings.TrimSpace(cells[i]), `"`)
	}
	if c.width == 0 {
		c.width = len(cells)
		if isHeading(cells) {
			return c.choose(n, cells)
		}
		if err := c.choose(n, make([]string, len(cells))); err != nil {
			return err
		}
	}
	if len(cells) != c.width {
		return fmt.Errorf("%s:%d: %d columns, the lines above have %d", c.name, n, len(cells), c.width)
	}
	return c.number(n, cells[c.at])
}

// isHeading: no cell of it is a number, and not all are empty or NaN.
func isHeading(cells []string) bool {
	for _, cell := range cells {
		if _, err := strconv.ParseFloat(cell, 64); err == nil || cell == "" {
			return false
		}
	}
	return true
}

// choose settles which column is read.
func (c *csvColumn) choose(n int, headings []string) error {
	switch {
	case c.want != "":
		c.at = slices.Index(headings, c.want)
		if c.at < 0 {
			return fmt.Errorf("%s:%d: no column is headed %q; found: %s", c.name, n, c.want, strings.Join(headings, ", "))
		}
	case len(headings) == 1:
		c.at = 0
	default:
		c.at = slices.Index(headings, "rate")
		if c.at < 0 {
			return fmt.Errorf("%s:%d: %d columns and none is headed \"rate\"; say which with --column HEADING", c.name, n, len(headings))
		}
	}
	return nil
}

func (c *csvColumn) number(n int, cell string) error {
	if c.gap > 0 {
		n, cell = c.gap, ""
	}
	switch strings.ToLower(cell) {
	case "":
		return fmt.Errorf("%s:%d: a value is missing: a gap; figures over a gap would be wrong, cut the file there", c.name, n)
	case "nan", "inf", "+inf", "-inf", "infinity":
		return fmt.Errorf("%s:%d: %s is no measured value; expected a finite number", c.name, n, cell)
	}
	d, err := parseDecimal(cell)
	if err != nil {
		return fmt.Errorf("%s:%d: %q is not a number (%w); expected one such as -0.0125", c.name, n, cell, err)
	}
	c.numbers = append(c.numbers, d)
	return nil
}

// decimal is mantissa * 10^exponent.
type decimal struct {
	mantissa int64
	exponent int
}

const mantissaDigits = 18 // fit an int64

func parseDecimal(text string) (decimal, error) {
	body, exponent := text, 0
	if i := strings.IndexAny(body, "eE"); i >= 0 {
		e, err := strconv.Atoi(body[i+1:])
		if err != nil || e < -300 || e > 300 {
			return decimal{}, fmt.Errorf("its exponent cannot be read")
		}
		body, exponent = body[:i], e
	}
	whole, fraction, _ := strings.Cut(body, ".")
	digits := whole + fraction
	exponent -= len(fraction)
	for strings.HasSuffix(digits, "0") && len(strings.TrimLeft(digits, "+-")) > 1 {
		digits, exponent = digits[:len(digits)-1], exponent+1
	}
	if over := len(strings.TrimLeft(digits, "+-0")) - mantissaDigits; over > 0 {
		digits, exponent = digits[:len(digits)-over], exponent+over
	}
	m, err := strconv.ParseInt(digits, 10, 64)
	if err != nil {
		return decimal{}, fmt.Errorf("digits, sign, point and exponent are allowed")
	}
	if m == 0 {
		exponent = 0
	}
	return decimal{m, exponent}, nil
}

// mantissas brings all numbers to one exponent: the smallest in the file, unless then a sum over all samples, or a second
// difference of such sums, could leave an int64; digits below that are rounded off, far beneath what a float64 holds
// of the largest sample.
func (c *csvColumn) mantissas() ([]int64, int) {
	low, largest := math.MaxInt, 0.0
	for _, d := range c.numbers {
		if d.mantissa != 0 {
			low = min(low, d.exponent)
			largest = max(largest, math.Abs(float64(d.mantissa))*math.Pow10(d.exponent))
		}
	}
	if largest == 0 {
		return make([]int64, len(c.numbers)), 0
	}
	room := math.Log10(largest) + math.Log10(4*float64(len(c.numbers))) - math.Log10(math.MaxInt64)
	low = max(low, int(math.Ceil(room)))
	counts := make([]int64, len(c.numbers))
	for i, d := range c.numbers {
		counts[i] = d.scaled(d.exponent - low)
	}
	return counts, low
}

// scaled is the mantissa times 10^by, rounded half away from zero.
func (d decimal) scaled(by int) int64 {
	m := d.mantissa
	for ; by > 0 && m != 0; by-- {
		m *= 10
	}
	if by <= -mantissaDigits-1 {
		return 0
	}
	for ; by < -1; by++ {
		m /= 10
	}
	if by == -1 {
		last := m % 10
		m /= 10
		if last >= 5 {
			m++
		} else if last <= -5 {
			m--
		}
	}
	return m
}
