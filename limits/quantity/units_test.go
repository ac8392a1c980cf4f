package quantity

import (
	"encoding/csv"
	"errors"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// TestUnitsOfTheTrade: values as the trade writes them, their SI numbers by definition, and that they print as they read.
func TestUnitsOfTheTrade(t *testing.T) {
	deg := math.Pi / 180
	for _, c := range []struct {
		text string
		si   float64
		want Dimension
		back string
	}{
		{"30 deg/s", 30 * deg, AngularRate, "30 deg/s"}, {"0.05 deg/h", 0.05 * deg / 3600, AngularRate, "0.05 deg/h"},
		{"0.003 deg/sqrt(h)", 0.003 * deg / 60, AngleRandomWalk, "0.003 deg/sqrt(h)"}, {"-40 degC", -40, Temperature, "-40 degC"},
		{"2 K", 2, TemperatureDifference, "2 K"}, {"1.5 K/min", 0.025, TemperatureRate, "1.5 K/min"}, {"20 min", 1200, Time, "20 min"},
		{"1 h 30 min", 5400, Time, "90 min"}, {"200 ppm", 200e-6, Ratio, "200 ppm"}, {"5 V", 5, Voltage, "5 V"}, {"0.8 A", 0.8, Current, "0.8 A"},
		{"100 Hz", 100, Frequency, "100 Hz"}, {"100Hz", 100, Frequency, "100 Hz"}, {"9.8 m/s^2", 9.8, Acceleration, "9.8 m/s^2"},
		{"1 g0", 9.80665, Acceleration, "1 g0"}, {"12 mV/(deg/s)", 0.012 / deg, VoltageScaleFactor, "12 mV/(deg/s)"},
		{"0.5 deg/h/K", 0.5 * deg / 3600, RateTemperature, "0.5 deg/h/K"}, {"60 deg/h/sqrt(Hz)", 60 * deg / 3600, AngleRandomWalk, "60 deg/h/sqrt(Hz)"},
		{"3 deg/h/sqrt(h)", 3 * deg / 3600 / 60, RateRandomWalk, "3 deg/h/sqrt(h)"}, {"+3 V", 3, Voltage, "3 V"}, {"7", 7, Ratio, "7"}, {"1e3 s", 1000, Time, "1000 s"},
	} {
		v, err := Parse(c.text)
		if err != nil {
			t.Errorf("%s: %v", c.text, err)
			continue
		}
		if math.Abs(v.SI()-c.si) > 1e-15*math.Abs(c.si) || v.Dimension() != c.want || v.String() != c.back {
			t.Errorf("%s: %g SI, %s, printed %q", c.text, v.SI(), v.Dimension(), v.String())
		}
	}
}

// TestExact: a conversion is exact where the definition is.
func TestExact(t *testing.T) {
	for _, c := range []struct {
		from, to string
		want     float64
	}{
		{"1 deg/s", "deg/h", 3600}, {"3600 deg/h", "deg/s", 1}, {"1 deg/sqrt(h)", "deg/h/sqrt(Hz)", 60}, {"1 turn", "deg", 360}, {"1 deg", "arcsec", 3600},
		{"0.1 h", "min", 6}, {"1 g0", "m/s^2", 9.80665}, {"250 ppm", "%", 0.025}, {"7 mV", "V", 0.007}, {"1 d", "s", 86400}, {"5 K/min", "K/h", 300},
	} {
		v, err := Parse(c.from)
		if err != nil {
			t.Fatal(err)
		}
		if got := v.As(MustUnit(c.to)); got != c.want {
			t.Errorf("%s is %.17g %s, by definition %.17g", c.from, got, c.to, c.want)
		}
	}
}

// TestTemperatures: absolute temperatures and differences are kept apart.
func TestTemperatures(t *testing.T) {
	c23, c5, k18 := Of(23, MustUnit("degC")), Of(5, MustUnit("degC")), Of(18, MustUnit("K"))
	if d, err := c23.Sub(c5); err != nil || !d.Same(k18) {
		t.Errorf("23 degC - 5 degC = %s, %v", d, err)
	}
	if s, err := c5.Add(k18); err != nil || !s.Same(c23) {
		t.Errorf("5 degC + 18 K = %s, %v", s, err)
	}
	if _, err := c5.Add(c23); err == nil {
		t.Error("two absolute temperatures were added")
	}
	if _, err := c5.In(MustUnit("K")); err == nil {
		t.Error("an absolute temperature was taken for a difference")
	}
	for _, text := range []string{"degC/min", "deg/h/degC", "1/degC"} {
		if _, err := ParseUnit(text); err == nil || !strings.Contains(err.Error(), "in K") {
			t.Errorf("%s: %v", text, err)
		}
	}
}

// TestRefusals: what is wrong is said with what was expected and what would fit.
func TestRefusals(t *testing.T) {
	_, err := ParseAs("5 V", AngularRate)
	if want := `"5 V" is in V (a voltage), an angular rate was expected; units that fit: deg/s, deg/h, rad/s`; err == nil || err.Error() != want {
		t.Errorf("%v", err)
	}
	if wrong, ok := errors.AsType[*UnitError](err); !ok || wrong.Want != AngularRate || len(wrong.Fits) == 0 {
		t.Errorf("%#v", err)
	}
	for _, text := range []string{"", "x", "5 furlong", "5 deg//s", "5 deg/", "5 sqrt(s", "1 h 30 V", "1 h -30 min", "5 m^9", "nan s", "1e999 s", "5 deg/s deg/s", "0x10 s", strings.Repeat("1", 5000)} {
		if v, err := Parse(text); err == nil {
			t.Errorf("%.20q was read as %s", text, v)
		}
	}
}

func TestLists(t *testing.T) {
	list, err := ParseList("23 -40 23 71 degC")
	if err != nil || len(list) != 4 || list[1] != Of(-40, MustUnit("degC")) {
		t.Errorf("%v, %v", list, err)
	}
	for _, text := range []string{"", "degC", "1 2 furlong", "1 degC 2 degC"} {
		if list, err := ParseList(text); err == nil {
			t.Errorf("%q was read as %v", text, list)
		}
	}
}

// TestThereAndBack: printed values read back the same, and conversions return to within rounding.
func TestThereAndBack(t *testing.T) {
	units := []string{"deg/s", "deg/h", "rad/s", "K", "K/min", "ppm", "V", "mA", "deg/sqrt(h)", "m/s^2", "g0", "mV/(deg/s)", "h", "degC"}
	rapid.Check(t, func(t *rapid.T) {
		v := Of(rapid.Float64Range(-1e9, 1e9).Draw(t, "number"), MustUnit(rapid.SampledFrom(units).Draw(t, "unit")))
		if got, err := Parse(v.String()); err != nil || got != v {
			t.Fatalf("%s reads back as %s, %v", v, got, err)
		}
		if math.Abs(v.Number) < 1e-290 {
			return // conversion may leave too few bits of it
		}
		if back := FromSI(v.SI(), v.Unit); math.Abs(back.Number-v.Number) > 4e-16*math.Abs(v.Number) {
			t.Fatalf("%s is %s after SI", v, back)
		}
	})
}

// table reads published values.
func table(t *testing.T, name string) []map[string]string {
	t.Helper()
	file, err := os.Open("../../testdata/reference/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	r := csv.NewReader(file)
	r.Comment = '#'
	all, err := r.ReadAll()
	if err != nil || len(all) < 2 {
		t.Fatalf("%d rows, %v", len(all), err)
	}
	var list []map[string]string
	for _, record := range all[1:] {
		row := map[string]string{}
		for i, cell := range record {
			row[all[0][i]] = cell
		}
		list = append(list, row)
	}
	return list
}

func float(t *testing.T, text string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(text, 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

func line(c, dof float64) Line { return Line{U: c, Sensitivity: 1, Contribution: c, DoF: dof} }

// TestGaugeBlock: JCGM 100, H.1: combined uncertainty and effective degrees of freedom of a budget.
func TestGaugeBlock(t *testing.T) {
	// Contributions in nm and degrees of freedom as printed there (H.1.6): 25/18, 9.7/25.6, 2.9/50, 16.6/2.
	m := T(0, Unit{}, []Line{line(25, 18), line(9.7, 25.6), line(2.9, 50), line(16.6, 2)})
	if math.Abs(m.U-32) > 0.6 || math.Abs(m.DoF-16.75) > 0.3 {
		t.Errorf("u = %.2f nm, %.2f degrees of freedom; printed are 32 and 16", m.U, m.DoF)
	}
}

// TestFamiliesInvert: the quantile of each family's CDF is where it began, far into the tails.
func TestFamiliesInvert(t *testing.T) {
	draws := make([]float64, 2000)
	for i := range draws {
		draws[i] = 5 + 2*normalQuantile((float64(i)+0.5)/2000)
	}
	for name, m := range map[string]Measured{
		"t of 3": T(5, Unit{}, []Line{line(2, 3)}), "t of 40": T(5, Unit{}, []Line{line(2, 40)}), "normal": T(5, Unit{}, []Line{line(2, math.Inf(1))}),
		"chi": Chi(5, 0, 5, Unit{}, nil), "sample": Sample(draws, 5, Unit{}, nil), "bound": {Family: Bound, U: 2, High: 4},
	} {
		for _, p := range []float64{1e-6, 0.001, 0.025, 0.3, 0.5, 0.9, 0.975, 0.999, 1 - 1e-6} {
			if got := m.CDF(m.Quantile(p)); math.Abs(got-p) > 1e-6*math.Max(1, 1/(1-p))*1e-1+1e-9 && math.Abs(got-p) > 1e-3*math.Min(p, 1-p) {
				t.Errorf("%s: CDF(Quantile(%g)) = %.9g", name, p, got)
			}
		}
	}
	// The propagated draws are those of a normal distribution: so are its tails.
	if m := Sample(draws, 5, Unit{}, nil); math.Abs(m.Quantile(1-1e-6)-(5+2*4.753424)) > 0.1 || math.Abs(m.Low-(5-2*1.959964)) > 0.01 {
		t.Errorf("tail %.3f, low %.3f", m.Quantile(1-1e-6), m.Low)
	}
}

// TestChiInterval: e-Handbook 7.2.3: a deviation's interval, and at six turn-ons 0.62 s to 2.45 s.
func TestChiInterval(t *testing.T) {
	m := Chi(1, 0, 5, Unit{}, nil)
	if math.Abs(m.Low-0.624) > 0.001 || math.Abs(m.High-2.453) > 0.001 {
		t.Errorf("%.4f to %.4f", m.Low, m.High)
	}
	shifted := Chi(1, 0.16, 5, Unit{}, nil)
	if math.Abs(shifted.Low-math.Sqrt(0.624*0.624-0.16)) > 0.002 || math.Abs(shifted.High-math.Sqrt(2.453*2.453-0.16)) > 0.002 {
		t.Errorf("shifted: %.4f to %.4f", shifted.Low, shifted.High)
	}
}

// TestStudentTable: JCGM 100, table G.2, against more digits than are printed there.
func TestStudentTable(t *testing.T) {
	compared := 0
	for _, row := range table(t, "gum/student_t_table_g2.csv") {
		if len(row["p"]) > 4 {
			continue // those of one, two and three standard deviations are printed rounded
		}
		dof, err := strconv.ParseFloat(row["nu"], 64)
		if err != nil {
			dof = math.Inf(1)
		}
		got, want := studentQuantile(0.5+float(t, row["p"])/2, dof), float(t, row["computed"])
		if math.Abs(got/want-1) > 1e-6 {
			t.Errorf("nu = %s, p = %s: %.9g, computed is %.9g", row["nu"], row["p"], got, want)
		}
		compared++
	}
	if compared < 45 {
		t.Errorf("%d values were compared", compared)
	}
}

func TestFormat(t *testing.T) {
	for _, c := range []struct {
		x, u float64
		want string
	}{
		{0.41234, 0.0213, "0.412"}, {178.234, 3.1, "178.2"}, {12345.6, 230, "12350"}, {-0.000123456, 0.0000012, "-0.0001235"}, {5, 0, "5"}, {math.NaN(), 1, "-"}, {1.0 / 3, 0, "0.333333"},
	} {
		if got := Format(c.x, c.u); got != c.want {
			t.Errorf("Format(%g, %g) = %q, expected %q", c.x, c.u, got, c.want)
		}
	}
}

func FuzzParse(f *testing.F) {
	for _, text := range []string{"30 deg/s", "1 h 30 min", "-40 71 degC", "12 mV/(deg/s)", "5 sqrt(sqrt(s))", "1e9999 m"} {
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text string) {
		if v, err := Parse(text); err == nil && !math.IsInf(v.SI(), 0) {
			if again, err := Parse(v.String()); err != nil || !again.Same(v) {
				t.Fatalf("%q is %s, which reads as %s, %v", text, v, again, err)
			}
		}
		ParseList(text)
	})
}
