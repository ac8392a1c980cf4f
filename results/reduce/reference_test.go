package reduce

import (
	"encoding/csv"
	"fmt"
	"math"
	"math/big"
	"os"
	"strconv"
	"strings"
	"testing"

	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

// rows reads a file of published values: its header names the columns, its comment lines say where they are from.
func rows(t *testing.T, name string) []map[string]string {
	t.Helper()
	file, err := os.Open("../../testdata/reference/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	reader := csv.NewReader(file)
	reader.Comment = '#'
	all, err := reader.ReadAll()
	if err != nil || len(all) < 2 {
		t.Fatalf("%s: %d rows, %v", name, len(all), err)
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

func number(t *testing.T, text string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(text, 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// rates makes a recording of unitless numbers a second apart.
func rates(t *testing.T, lines []string) *recording.Recording {
	t.Helper()
	r, err := recording.ReadCSV("test", strings.NewReader(strings.Join(lines, "\n")), recording.CSVOptions{SampleInterval: 1})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// TestNinePoints: NBS Monograph 140, annex 8.E, as printed in NIST SP 1065, 12.4.
func TestNinePoints(t *testing.T) {
	curve := AllanCurve(rates(t, strings.Fields("892 809 823 798 671 644 883 903 677")), 0)
	compared := 0
	for _, row := range rows(t, "allan/nbs140_9point.csv") {
		if row["statistic"] != "OADEV" {
			continue
		}
		p := curve[int(number(t, row["m"]))-1]
		if got := fmt.Sprintf("%.7g", p.Deviation); got != row["published"] {
			t.Errorf("m = %s: %s, published is %s", row["m"], got, row["published"])
		}
		if p.N != int(number(t, row["n_terms"])) {
			t.Errorf("m = %s: %d differences, %s are summed", row["m"], p.N, row["n_terms"])
		}
		compared++
	}
	if compared != 2 {
		t.Errorf("%d values were compared", compared)
	}
}

// thousand is the portable test suite of NIST SP 1065, 12.4.
func thousand(t *testing.T) *recording.Recording {
	var lines []string
	for i, x := 0, uint64(1234567890); i < 1000; i++ {
		lines = append(lines, fmt.Sprintf("%.17g", float64(x)/2147483647))
		x = 16807 * x % 2147483647
	}
	return rates(t, lines)
}

func TestThousandPoints(t *testing.T) {
	curve := AllanCurve(thousand(t), 0)
	compared := 0
	for _, row := range rows(t, "allan/sp1065_1000point.csv") {
		if row["statistic"] != "OADEV" {
			continue
		}
		if got := fmt.Sprintf("%.6e", curve[int(number(t, row["m"]))-1].Deviation); got != row["published"] {
			t.Errorf("m = %s: %s, published is %s", row["m"], got, row["published"])
		}
		compared++
	}
	for _, row := range rows(t, "allan/sp1065_1000point_all_tau.csv") {
		p := curve[int(number(t, row["m"]))-1]
		if want := number(t, row["oadev"]); math.Abs(p.Deviation/want-1) > 1e-11 {
			t.Errorf("m = %s: %.13g, computed with exact sums %.13g", row["m"], p.Deviation, want)
		}
		compared++
	}
	if compared != 3+333 {
		t.Errorf("%d values were compared", compared)
	}
}

// TestWhiteDegreesOfFreedom: exact values of sampled white noise, by the trace of its covariance matrix.
func TestWhiteDegreesOfFreedom(t *testing.T) {
	compared := 0
	for _, row := range rows(t, "allan/edf_values.csv") {
		if row["alpha"] != "0" || row["kind"] != "ov" || row["d"] != "2" || row["edf_sampled"] == "" {
			continue
		}
		n, m := int(number(t, row["N"]))-1, int(number(t, row["m"]))
		got, want := whiteDoF(n, m), number(t, row["edf_sampled"])
		// The formula counts edges of the sum over lags to first order; far from n = 3m it is exact.
		tolerance := 1e-6
		if m > 256 {
			tolerance = 0.01
		}
		if math.Abs(got/want-1) > tolerance {
			t.Errorf("N = %s, m = %d: %.9g, exact is %.9g", row["N"], m, got, want)
		}
		compared++
	}
	if compared < 4 {
		t.Errorf("%d values were compared", compared)
	}
}

// TestFittedDegreesOfFreedom: those of the fit, from the spectrum, against the model of Greenhall and Riley (PTTI
// 2003) for white noise, flicker and random walk of the rate (alpha 0, -1, -2).
func TestFittedDegreesOfFreedom(t *testing.T) {
	terms := map[string]int{"0": termN, "-1": termB, "-2": termK}
	compared := 0
	for _, row := range rows(t, "allan/edf_values.csv") {
		term, ok := terms[row["alpha"]]
		m, n := int(number(t, row["m"])), int(number(t, row["N"]))-1
		if !ok || row["kind"] != "ov" || row["d"] != "2" || n < 1000 || m < 10 || m > n/tauParts {
			continue
		}
		var model coefficients
		model[term] = 1
		l := newLaw(n, []int{m}, 1)
		v := model.variance(float64(m))
		dof := 2 * v * v / l.variances(model)[0]
		column := "edf_model"
		if row["edf_sampled"] != "" {
			column = "edf_sampled"
		}
		if want := number(t, row[column]); math.Abs(dof/want-1) > 0.01 {
			t.Errorf("alpha %s, m = %d: %.4g, %s is %.4g", row["alpha"], m, dof, column, want)
		}
		compared++
	}
	if compared < 6 {
		t.Errorf("%d values were compared", compared)
	}
}

// TestLineIsStRD: NIST StRD Norris and (through the origin's shift) its certified slope and offset to ten digits or more.
func TestLineIsStRD(t *testing.T) {
	var s Sweep
	for _, row := range rows(t, "strd/norris.csv") {
		s = append(s, SweepPoint{Input: number(t, row["x"]), Output: number(t, row["y"])})
	}
	line := s.Line()
	got := map[string]float64{"B0": line.Offset, "B1": line.Slope}
	compared := 0
	for _, row := range rows(t, "strd/certified_linear_parameters.csv") {
		if row["dataset"] != "Norris" {
			continue
		}
		if want := number(t, row["estimate"]); math.Abs(got[row["parameter"]]/want-1) > 1e-12 {
			t.Errorf("%s: %.15g, certified is %.15g", row["parameter"], got[row["parameter"]], want)
		}
		compared++
	}
	if compared != 2 {
		t.Errorf("%d values were compared", compared)
	}
}

// TestSlowWindows: half the variance of the difference of adjacent windows is the Allan variance, whose closed forms
// for a Markov process and for flicker are published (IEEE Std 952, annex C).
func TestSlowWindows(t *testing.T) {
	allan := func(c coefficients, tau float64) float64 {
		cov := c.windows([]window{{0, tau}, {tau, tau}})
		return (cov[0][0] + cov[1][1] - 2*cov[0][1]) / 2
	}
	defer func(old []float64) { markovTimesS = old }(markovTimesS)
	for _, tau := range []float64{1, 10, 100, 1000} {
		if got := allan(coefficients{termB: 1}, tau) / flickerPlateau; math.Abs(got-1) > 0.025 {
			t.Errorf("flicker at %g s: %.4f of the plateau", tau, got)
		}
		if got, want := allan(coefficients{termK: 1}, tau), tau/3; math.Abs(got/want-1) > 1e-9 {
			t.Errorf("random walk at %g s: %.6g, closed form %.6g", tau, got, want)
		}
	}
	// One process with T = 1 and q_c = 1 has the variance q_c^2 T/2.
	markovTimesS = []float64{1}
	b2 := 0.5 * math.Pi / math.Ln10
	compared := 0
	for _, row := range rows(t, "allan/ieee952_points.csv") {
		if row["case"] != "markov_qc=1_Tc=1" {
			continue
		}
		tau, want := number(t, row["tau"]), number(t, row["sigma2"])
		if got := allan(coefficients{termB: b2}, tau); math.Abs(got/want-1) > 1e-6 {
			t.Errorf("Markov at %g s: %.8g, closed form %.8g", tau, got, want)
		}
		compared++
	}
	if compared < 4 {
		t.Errorf("%d values were compared", compared)
	}
}

// TestExactMean: the sum is that of big-number arithmetic, for a bias of 10^12 times the noise, for small sums of either
// sign, and for sums beyond an int64.
func TestExactMean(t *testing.T) {
	for name, counts := range map[string][]int64{
		"small negative": {-1, 0, 0, 0}, "small positive": {1, 0, 0, 0}, "none": {5, -5, 7, -7}, "large negative": {-1 << 40, 3 - 1<<40, -1 << 40, 1 - 1<<40},
		"large positive": {1 << 40, 3 + 1<<40, 1 << 40, 1 + 1<<40}, "beyond": {math.MaxInt64, math.MaxInt64, math.MaxInt64, 5}, "below": {math.MinInt64, math.MinInt64, math.MinInt64, -5},
	} {
		sum := new(big.Int)
		for _, c := range counts {
			sum.Add(sum, big.NewInt(c))
		}
		want, _ := new(big.Rat).SetFrac(sum, big.NewInt(int64(len(counts)))).Float64()
		if got := (signal{counts: counts, count: 1}).mean(); got != want {
			t.Errorf("%s: %.17g, exact is %.17g", name, got, want)
		}
	}
}

// TestCatalogue: every entry says what it is, its unit and its published source.
func TestCatalogue(t *testing.T) {
	seen := map[string]bool{}
	for _, m := range Catalogue() {
		if m.Name == "" || m.Doc == "" || m.Source == "" || m.Reduce == nil || seen[m.Name] {
			t.Errorf("entry %q is not complete, or stands twice", m.Name)
		}
		seen[m.Name] = true
		if m.Unit == (quantity.Unit{}) && !strings.HasPrefix(m.Name, "scale-factor") && m.Name != "polarity" {
			t.Errorf("%s has no unit", m.Name)
		}
	}
}
