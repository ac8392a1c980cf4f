package virtual

import (
	"math"
	"testing"
)

// impulse is a source of deviates that are all 0 but one.
type impulse struct{ at, asked int }

func (i *impulse) NormFloat64() float64 {
	i.asked++
	if i.asked-1 == i.at {
		return 1
	}
	return 0
}

// exactDeviation is the Allan deviation that slow noise has by its construction, with no chance in it: it is linear in
// its deviates, so its variance is the sum of the squares of what each of them makes alone. Deviates of later seconds
// do the same later.
func exactDeviation(b, k float64, tausS []int) []float64 {
	count := &impulse{at: -1}
	n := newSlowNoise(b, k, count)
	start := count.asked // deviates of the beginning
	n.advance()
	each := count.asked - start // and of each second
	whole := 2 * tausS[len(tausS)-1]

	variance := make([]float64, len(tausS))
	sums := make([]float64, whole*slowTicks+1) // of the response, over ticks
	for at := range start + each {
		g := &impulse{at: at}
		n := newSlowNoise(b, k, g)
		for s := range whole {
			n.advance()
			for i := 1; i <= slowTicks; i++ {
				sums[s*slowTicks+i] = sums[s*slowTicks+i-1] + n.at(float64(i)/slowTicks)
			}
		}
		to := func(ticks int) float64 { return sums[max(0, ticks)] }
		for i, tau := range tausS {
			m := tau * slowTicks
			shifts := 2 * tau // the same deviate in every second of the two averages
			if at < start {
				shifts = 1
			}
			for s := range shifts {
				d := to(2*m-s*slowTicks) - 2*to(m-s*slowTicks) + to(-s*slowTicks)
				variance[i] += d * d / (2 * float64(m) * float64(m))
			}
		}
	}
	deviation := make([]float64, len(tausS))
	for i, v := range variance {
		deviation[i] = math.Sqrt(v)
	}
	return deviation
}

// TestSynthesisHasItsClosedForm: within 0.5 %. Interpolation between the steps of the fast stages costs
// most at the shortest averaging times.
func TestSynthesisHasItsClosedForm(t *testing.T) {
	taus := []int{1, 3, 10, 30, 100, 300}
	for _, c := range []struct{ b, k float64 }{{1, 0}, {0, 1}, {2, 0.01}} {
		truth := &Truth{Gyro: Parameters{K: c.k}, Angle: true, slow: newSlowNoise(c.b, c.k, &impulse{at: -1}).stages}
		for i, got := range exactDeviation(c.b, c.k, taus) {
			want := truth.Deviation(float64(taus[i]))
			tolerance := 0.005
			if c.b == 0 && taus[i] < 10 {
				tolerance = 0.2 / float64(taus[i]) // a walk in steps of a second
			}
			if math.Abs(got/want-1) > tolerance {
				t.Errorf("B %v, K %v at %d s: %.6g, closed form %.6g (%+.2f %%)", c.b, c.k, taus[i], got, want, 100*(got/want-1))
			}
		}
	}
}

// TestFlickerIsFlat: a good decade inside the ends the sum of stages is flat at 0.664 B within 1.1 %, which is what one
// stage a decade gives. At the correlation time of its last stages, and a decade inside, it falls short by what the
// stages beyond would have added: 2 v T/tau for the short ones, 2 v tau/(3 T) for the long ones.
func TestFlickerIsFlat(t *testing.T) {
	truth := &Truth{Angle: true, slow: newSlowNoise(1, 0, &impulse{at: -1}).stages}
	const floor = 0.66428247026796
	for tau := 15.0; tau < 3e4; tau *= 1.1 {
		if got := truth.Deviation(tau) / floor; math.Abs(got-1) > 0.0115 {
			t.Errorf("at %.0f s: %.4f of the floor", tau, got)
		}
	}
	for tau, want := range map[float64]float64{0.1: 0.821, 1: 0.978, 1e5: 0.990, 1e6: 0.937} {
		if got := truth.Deviation(tau) / floor; math.Abs(got-want) > 0.001 {
			t.Errorf("at %.3g s: %.4f of the floor, want %.3f", tau, got, want)
		}
	}
}

// TestMarkovAllanVariance compares with the values that were integrated from the spectrum.
func TestMarkovAllanVariance(t *testing.T) {
	n := 0
	for _, row := range readReference(t, "allan/ieee952_points.csv") {
		if row["case"] != "markov_qc=1_Tc=1" {
			continue
		}
		n++
		m := markov{variance: 0.5, time: 1} // v = qc^2 Tc / 2
		tau, want := number(t, row["tau"]), number(t, row["sigma2"])
		if got := m.allanVariance(tau); math.Abs(got/want-1) > 1e-9 {
			t.Errorf("at %v: %.10g, want %.10g", tau, got, want)
		}
	}
	if n != 9 {
		t.Errorf("%d values compared, want 9", n)
	}
	// The series for short times meets the form for long ones.
	m := markov{variance: 1, time: 1}
	if a, b := m.allanVariance(0.99999e-3), m.allanVariance(1.00001e-3); math.Abs(a/b-1) > 3e-5 {
		t.Errorf("a step between series and form: %v, %v", a, b)
	}
}

// TestWhiteNoiseBelongsToItsSecond: a deviate depends on seed, gyro, second and index alone.
func TestWhiteNoiseBelongsToItsSecond(t *testing.T) {
	read := func(w *white, second int64, index int) float64 {
		w.seek(second, index)
		w.next++
		return w.normals.NormFloat64()
	}
	w := newWhite(1, "gyro A white noise")
	forward := map[[2]int]float64{}
	for second := range 20 {
		for i := range frameRate {
			forward[[2]int{second, i}] = read(w, int64(second), i)
		}
	}
	for _, at := range [][2]int{{19, 99}, {3, 7}, {3, 6}, {0, 0}, {12, 50}} {
		if got := read(w, int64(at[0]), at[1]); got != forward[at] {
			t.Errorf("deviate %v is %v when asked for alone, %v in order", at, got, forward[at])
		}
	}
	if read(newWhite(2, "gyro A white noise"), 0, 0) == forward[[2]int{0, 0}] || read(newWhite(1, "gyro B white noise"), 0, 0) == forward[[2]int{0, 0}] {
		t.Error("two seeds or two gyros share a stream")
	}
}

// TestWhiteNoiseIsWhite: mean, variance, and correlation from one second to the next and of neighbouring seeds, each
// within five standard errors.
func TestWhiteNoiseIsWhite(t *testing.T) {
	const seconds = 2000
	draw := func(seed uint64) []float64 {
		w := newWhite(seed, "gyro A white noise")
		var all []float64
		for s := range int64(seconds) {
			w.seek(s, 0)
			w.next += frameRate
			for range frameRate {
				all = append(all, w.normals.NormFloat64())
			}
		}
		return all
	}
	a, b := draw(1), draw(2)
	n := float64(len(a))
	var mean, square, later, other float64
	for i, x := range a {
		mean += x / n
		square += x * x / n
		other += x * b[i] / n
		if i >= frameRate {
			later += x * a[i-frameRate] / n
		}
	}
	for name, z := range map[string]float64{"mean": mean, "variance": (square - 1) / math.Sqrt2, "next second": later, "next seed": other} {
		if math.Abs(z)*math.Sqrt(n) > 5 {
			t.Errorf("%s is off by %.1f standard errors", name, z*math.Sqrt(n))
		}
	}
}
