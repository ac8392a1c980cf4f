package virtual

import (
	"math"
	"testing"

	"proofrate/instruments"
)

const degPerHour = math.Pi / 180 / 3600 // rad/s

// TestEarthRateOnUprightAxes compares with the table of the Earth rate's components at many latitudes.
func TestEarthRateOnUprightAxes(t *testing.T) {
	for _, row := range readReference(t, "physics/earth_rate_gravity.csv") {
		latitude := number(t, row["latitude_deg"]) * math.Pi / 180
		vertical, horizontal := number(t, row["omega_vertical_rad_s"]), number(t, row["omega_horizontal_rad_s"])
		for _, c := range []struct {
			axis  instruments.Vector
			sense float64
			want  float64
		}{
			{instruments.Vector{0, 0, 1}, 1, vertical}, {instruments.Vector{0, 0, 1}, -1, -vertical},
			{instruments.Vector{0, 0, -2}, 1, -vertical}, {instruments.Vector{0, 1, 0}, 1, horizontal}, {instruments.Vector{1, 0, 0}, 1, 0},
		} {
			m := newMounting(newEarth(latitude, 9.8), newAxes(c.axis, [2]float64{}), c.sense, 0, [2]float64{})
			if got := m.earth.at(math.Sincos(0.7)); math.Abs(got-c.want) > 5e-14 {
				t.Errorf("latitude %v, axis %v: %v, want %v", latitude, c.axis, got, c.want)
			}
		}
	}
}

// TestTiltTurnsWithTheTable: at 45 degrees of latitude 1 mrad off is worth 0.011 deg/h at most, and in which sense
// depends on the heading; over a turn it cancels.
func TestTiltTurnsWithTheTable(t *testing.T) {
	m := newMounting(newEarth(math.Pi/4, 9.8), newAxes(instruments.Vector{0, 0, 1}, [2]float64{}), 1, 0, [2]float64{1e-3, 0})
	low, high, sum := math.Inf(1), math.Inf(-1), 0.0
	for i := range 360 {
		x := m.earth.at(math.Sincos(float64(i)*math.Pi/180)) / degPerHour
		low, high, sum = math.Min(low, x), math.Max(high, x), sum+x/360
	}
	middle := 15.04106688 * math.Sin(math.Pi/4)
	if math.Abs(high-middle-0.010636) > 2e-5 || math.Abs(middle-low-0.010636) > 2e-5 || math.Abs(sum-middle) > 1e-4 {
		t.Errorf("from %v to %v about %v, want 0.010636 about %v", low, high, sum, middle)
	}
}

// TestMountingAgainstRotation compares with the input axis turned step by step as a vector.
func TestMountingAgainstRotation(t *testing.T) {
	e := newEarth(0.9, 9.81)
	for _, axis := range []instruments.Vector{{0, 0, 1}, {0.2, 0.9, -0.1}, {1, 0.05, 0}} {
		a := newAxes(axis, [2]float64{2e-3, -3e-3})
		off := [2]float64{0.01, -0.02}
		m := newMounting(e, a, -1, 0.3, off)
		for _, phi := range []float64{0, 0.4, 2, -5} {
			// Rodrigues' formula about the table's axis.
			turn := func(v instruments.Vector) instruments.Vector {
				sin, cos := math.Sincos(phi)
				return sum(scaled(v, cos), scaled(cross(a[2], v), sin), scaled(a[2], dot(a[2], v)*(1-cos)))
			}
			radius, tangent := turn(a[0]), turn(a[1])
			input := scaled(turn(sum(scaled(a[0], off[0]), scaled(a[1], off[1]), scaled(a[2], math.Sqrt(1-0.0005)))), -1)
			const rate = 2.0
			force := sum(e.up, scaled(radius, -rate*rate*0.3))
			sin, cos := math.Sincos(phi)
			gotInput, gotRadial, gotTangential := m.force(sin, cos, rate)
			for name, c := range map[string][2]float64{
				"earth": {m.earth.at(sin, cos), dot(e.rate, input)}, "axial": {m.axial, dot(a[2], input)}, "input": {gotInput, dot(force, input)},
				"radial": {gotRadial, dot(force, radius)}, "tangential": {gotTangential, dot(force, tangent)},
			} {
				if math.Abs(c[0]-c[1]) > 1e-12 {
					t.Errorf("axis %v, phi %v: %s %v, want %v", axis, phi, name, c[0], c[1])
				}
			}
		}
		if got := math.Acos(dot(a[2], unit(axis))); math.Abs(got-math.Hypot(2e-3, 3e-3)) > 1e-7 {
			t.Errorf("axis %v is tilted by %v", axis, got)
		}
	}
}

// TestCentripetal: 0.15 m at 200 deg/s is 0.19 g, towards the table's axis whatever the sense of rotation.
func TestCentripetal(t *testing.T) {
	m := newMounting(newEarth(0.9, 9.81), newAxes(instruments.Vector{0, 0, 1}, [2]float64{}), 1, 0.15, [2]float64{})
	for _, rate := range []float64{200, -200} {
		_, radial, _ := m.force(0, 1, rate*math.Pi/180)
		if got := radial / 9.80665; math.Abs(got+0.1864) > 1e-4 {
			t.Errorf("%v deg/s: %v g, want -0.1864", rate, got)
		}
	}
}
