package virtual

import "math"

// ScalePoint is one recording of a sweep: its nominal rate along the input axis, which groups recordings, its leg, and
// its truth.
type ScalePoint struct {
	Nominal float64 // rad/s
	Up      bool    // approached from below
	Window  Window
}

// ScaleFactor is the family of figures that a straight line through a sweep gives, applied to the noise-free response
// under the true inputs. Ratios are of 1.
type ScaleFactor struct {
	Slope, Intercept float64 // of the unweighted least-squares line; the slope over nominal is 1 + Error
	Error            float64 // S/S_nom - 1
	Nonlinearity     float64 // max |y - S x - c| / (S x_FS)
	Asymmetry        float64 // (S+ - S-)/S, points of no rate in both halves
	Hysteresis       float64 // max over nominal rates |mean up - mean down| / (S x_FS); NaN without both legs
}

// ScaleFactorOf applies the definitions to a sweep of a gyro specified up to fullScale, rad/s.
func ScaleFactorOf(points []ScalePoint, fullScale float64) ScaleFactor {
	all := func(ScalePoint) bool { return true }
	slope, intercept := line(points, all)
	plus, _ := line(points, func(p ScalePoint) bool { return p.Nominal >= 0 })
	minus, _ := line(points, func(p ScalePoint) bool { return p.Nominal <= 0 })
	f := ScaleFactor{Slope: slope, Intercept: intercept, Error: slope - 1, Asymmetry: (plus - minus) / slope, Hysteresis: math.NaN()}
	type leg struct{ sum, n float64 }
	legs := map[float64]*[2]leg{}
	for _, p := range points {
		residual := p.Window.Deterministic - slope*p.Window.Input - intercept
		f.Nonlinearity = math.Max(f.Nonlinearity, math.Abs(residual)/(slope*fullScale))
		if legs[p.Nominal] == nil {
			legs[p.Nominal] = new([2]leg)
		}
		l := &legs[p.Nominal][btoi(p.Up)]
		l.sum, l.n = l.sum+residual, l.n+1
	}
	for _, l := range legs {
		if l[0].n > 0 && l[1].n > 0 {
			apart := math.Abs(l[0].sum/l[0].n-l[1].sum/l[1].n) / (slope * fullScale)
			if !(f.Hysteresis >= apart) {
				f.Hysteresis = apart
			}
		}
	}
	return f
}

// NonlinearityOfReading is max |y - S x - c| / (S |x|) over the points whose |x| is at least least, rad/s.
func NonlinearityOfReading(points []ScalePoint, least float64) float64 {
	slope, intercept := line(points, func(ScalePoint) bool { return true })
	worst := 0.0
	for _, p := range points {
		if x := math.Abs(p.Window.Input); x >= least {
			worst = math.Max(worst, math.Abs(p.Window.Deterministic-slope*p.Window.Input-intercept)/(slope*x))
		}
	}
	return worst
}

// line is the unweighted least-squares line through some of the points.
func line(points []ScalePoint, take func(ScalePoint) bool) (slope, intercept float64) {
	var n, x, y float64
	for _, p := range points {
		if take(p) {
			n, x, y = n+1, x+p.Window.Input, y+p.Window.Deterministic
		}
	}
	x, y = x/n, y/n
	var xx, xy float64
	for _, p := range points {
		if take(p) {
			dx := p.Window.Input - x
			xx, xy = xx+dx*dx, xy+dx*(p.Window.Deterministic-y)
		}
	}
	return xy / xx, y - xy/xx*x
}
