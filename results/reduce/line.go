package reduce

import (
	"math"
	"slices"
)

// SweepPoint is one rate of a sweep: mean input and mean output over one recording.
type SweepPoint struct {
	Nominal float64 // rad/s: the rate that the procedure names
	Input   float64 // rad/s about the input axis, Earth's rate and polarity in it
	Output  float64 // rad/s at the nominal scale factor
}

// Sweep is a set of points in the order in which they were measured.
type Sweep []SweepPoint

// Line is y = Slope x + Offset.
type Line struct{ Slope, Offset float64 }

// Line is the unweighted least-squares line through all points.
//
//	S = sum (x-xm)(y-ym) / sum (x-xm)^2,   c = ym - S xm
//
// Source: IEEE Std 952-1997, 12.7 (scale factor); the normal equations about the means, as for the StRD sets.
func (s Sweep) Line() Line {
	var xm, ym float64
	for _, p := range s {
		xm += p.Input
		ym += p.Output
	}
	n := float64(len(s))
	xm, ym = xm/n, ym/n
	var sxx, sxy float64
	for _, p := range s {
		sxx += (p.Input - xm) * (p.Input - xm)
		sxy += (p.Input - xm) * (p.Output - ym)
	}
	slope := sxy / sxx
	return Line{slope, ym - slope*xm}
}

// Error is S - 1: the scale factor relative to the nominal one.
func (s Sweep) Error() float64 { return s.Line().Slope - 1 }

// Nonlinearity is max |y - S x - c| over S times full scale, or over |S x| for rates from least up; 0 if there is none.
// Source: IEEE Std 952-1997, 12.7.4.
func (s Sweep) Nonlinearity(fullScale float64, ofReading bool, least float64) float64 {
	most := 0.0
	for _, r := range s.relativeResiduals(fullScale, ofReading, least) {
		most = math.Max(most, math.Abs(r))
	}
	return most
}

// relativeResiduals are (y - S x - c) over S times full scale, or over |S x| for those rates from least up.
func (s Sweep) relativeResiduals(fullScale float64, ofReading bool, least float64) []float64 {
	line := s.Line()
	var list []float64
	for _, p := range s {
		part := fullScale
		if ofReading {
			if part = math.Abs(p.Input); part < least || part == 0 {
				continue
			}
		}
		list = append(list, (p.Output-line.Slope*p.Input-line.Offset)/(math.Abs(line.Slope)*part))
	}
	return list
}

// Asymmetry is (S+ - S-)/S, the slopes of the points at positive and at negative rates, those at rest in both.
// Source: IEEE Std 952-1997, 12.7.5.
func (s Sweep) Asymmetry() float64 {
	var positive, negative Sweep
	for _, p := range s {
		if p.Nominal >= 0 {
			positive = append(positive, p)
		}
		if p.Nominal <= 0 {
			negative = append(negative, p)
		}
	}
	return (positive.Line().Slope - negative.Line().Slope) / s.Line().Slope
}

// Hysteresis is max |y_up - y_down| over S times full scale, over equal nominal rates of the full traverse; NaN if
// there is no rate that was come to from both sides. Source: IEEE Std 528 for the term.
func (s Sweep) Hysteresis(fullScale float64) float64 {
	most := math.NaN()
	for _, g := range s.relativeGaps(fullScale) {
		if !(math.Abs(g) <= most) {
			most = math.Abs(g)
		}
	}
	return most
}

// relativeGaps are, for each rate that was come to from both sides, the difference of its mean residuals from the line,
// upward less downward, over S times full scale.
func (s Sweep) relativeGaps(fullScale float64) []float64 {
	line := s.Line()
	mean := func(points []int) float64 {
		sum := 0.0
		for _, i := range points {
			sum += s[i].Output - line.Slope*s[i].Input - line.Offset
		}
		return sum / float64(len(points))
	}
	var list []float64
	for _, p := range s.pairs() {
		list = append(list, (mean(p.up)-mean(p.down))/(math.Abs(line.Slope)*fullScale))
	}
	return list
}

// pair is the same nominal rate come to from below and from above, each the indices of its points.
type pair struct{ up, down []int }

// pairs finds the rates of a full traverse that were come to from both sides. The first leg, up to the first turn,
// conditions the gyro and does not count; nor does a turning point, which has no side.
func (s Sweep) pairs() []pair {
	turned := false
	byRate := map[float64]*pair{}
	var order []float64
	for i := 1; i+1 < len(s); i++ {
		before, after := s[i].Nominal-s[i-1].Nominal, s[i+1].Nominal-s[i].Nominal
		if before*after < 0 {
			turned = true
			continue
		}
		if !turned || before == 0 {
			continue
		}
		p := byRate[s[i].Nominal]
		if p == nil {
			p = &pair{}
			byRate[s[i].Nominal] = p
			order = append(order, s[i].Nominal)
		}
		if before > 0 {
			p.up = append(p.up, i)
		} else {
			p.down = append(p.down, i)
		}
	}
	slices.Sort(order)
	var list []pair
	for _, rate := range order {
		if p := byRate[rate]; len(p.up) > 0 && len(p.down) > 0 {
			list = append(list, *p)
		}
	}
	return list
}
