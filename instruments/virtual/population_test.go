package virtual

import (
	"flag"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
)

func TestShippedPopulationsLoadAndDraw(t *testing.T) {
	names := Populations()
	if want := []string{"optical", "optical-angle", "spinning-mass", "vibratory"}; !slices.Equal(names, want) {
		t.Errorf("shipped are %v, want %v", names, want)
	}
	for _, name := range names {
		t.Run(name, func(t *testing.T) {
			p := load(t, name)
			if p.Name != name {
				t.Errorf("it calls itself %q", p.Name)
			}
			for seed := range uint64(40) {
				if _, err := p.draw(seed+1, "A", nil); err != nil {
					t.Error(err)
				}
			}
		})
	}
}

func load(t testing.TB, name string) *Population {
	t.Helper()
	text, ok := Shipped(name)
	if !ok {
		t.Fatalf("no population %q", name)
	}
	p, _, problems := LoadPopulation(name, text)
	if err := problems.Err(); err != nil {
		t.Fatal(err)
	}
	return p
}

// TestParametersHaveOnePlaceEach: no two rows of the table write the same field, and none is without words.
func TestParametersHaveOnePlaceEach(t *testing.T) {
	var p Parameters
	for i, row := range parameters {
		*row.at(&p) = float64(i + 1)
	}
	for i, row := range parameters {
		if *row.at(&p) != float64(i+1) {
			t.Errorf("%s shares its place", row.name)
		}
		if row.doc == "" {
			t.Errorf("%s has no doc", row.name)
		}
	}
}

// TestSpreadsAreDrawnAsStated compares mean and standard deviation over many gyros with what the document says: within
// five standard errors, that is one false alarm in a million.
func TestSpreadsAreDrawnAsStated(t *testing.T) {
	const n = 4000
	for _, c := range []struct {
		s        spread
		mean, sd float64
	}{
		{spread{kind: "fixed", value: 7}, 7, 0},
		{spread{kind: "mean", value: 2, sd: 0.5}, 2, 0.5},
		{spread{kind: "max", value: 3}, 0, 3 / math.Sqrt(3)},
		// A normal cut off at one standard deviation: sd^2 (1 - 2 phi(1)/(2 Phi(1) - 1)).
		{spread{kind: "mean", value: 2, sd: 0.5, within: 0.5, cutOff: true}, 2, 0.5 * math.Sqrt(1-2*0.24197072451914337/0.6826894921370859)},
	} {
		mean, square := 0.0, 0.0
		for seed := range uint64(n) {
			x := c.s.draw(seed+1, "part")
			mean += x / n
			square += x * x / n
		}
		sd := math.Sqrt(max(0, square-mean*mean))
		if math.Abs(mean-c.mean) > 5*c.sd/math.Sqrt(n)+1e-12 || math.Abs(sd-c.sd) > 5*c.sd/math.Sqrt(2*n)+1e-7 {
			t.Errorf("%+v: mean %v, sd %v; want %v, %v", c.s, mean, sd, c.mean, c.sd)
		}
	}
}

func TestEachParameterAndSlotHasItsOwnStream(t *testing.T) {
	p := load(t, "optical")
	a, errA := p.draw(1, "A", nil)
	b, errB := p.draw(1, "B", nil)
	c, errC := p.draw(1, "A", map[string]quantity.Value{"bias": q(t, "1 deg/h")})
	if errA != nil || errB != nil || errC != nil {
		t.Fatal(errA, errB, errC)
	}
	if a.Bias == b.Bias || a.Asymmetry/a.ScaleFactorError == b.Asymmetry/b.ScaleFactorError {
		t.Error("slots share draws")
	}
	c.Bias = a.Bias
	if a != c {
		t.Error("setting one parameter has moved others")
	}
}

func TestOverridesAreRefused(t *testing.T) {
	p := load(t, "optical")
	for name, c := range map[string]struct{ name, value, want string }{
		"unknown":      {"nonlinearty", "180 ppm", `did you mean "nonlinearity"`},
		"other family": {"hysteresis", "1 ppm", "parameter of optical gyros"},
		"dimension":    {"bias", "2 deg", "an angular rate was expected"},
		"not positive": {"wavelength", "0 nm", "wavelength"},
		"polarity":     {"polarity", "0.5", "1 or -1"},
		"saturation":   {"saturation", "1", "at least 1.1"},
		"too fine":     {"range", "250 turn/s", "32 bits"},
	} {
		t.Run(name, func(t *testing.T) {
			_, err := p.draw(1, "A", map[string]quantity.Value{c.name: q(t, c.value)})
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("%v, want %q", err, c.want)
			}
		})
	}
}

// TestBadPopulations changes one thing in a sound document and wants to be told of it.
func TestBadPopulations(t *testing.T) {
	text, _ := Shipped("optical")
	for name, c := range map[string]struct{ from, to, want string }{
		"unknown key":       {"family: optical", "family: optical\nfamly: optical", `no key "famly"`},
		"family":            {"family: optical", "family: optcal", "none of the choices"},
		"count of angle":    {"count: 0.05 deg/h", "count: 0.05 deg", "an angular rate was expected"},
		"count of nothing":  {"count: 0.05 deg/h", "count: 0 deg/h", "worth nothing"},
		"missing":           {"  bias: {mean: 0 deg/h, sd: 0.35 deg/h}\n", "", `needs the parameter "bias"`},
		"other family":      {"  dead-band:", "  hysteresis: {fixed: 1 ppm}\n  dead-band:", `no parameter "hysteresis"`},
		"dimension":         {"{mean: 0 deg/h, sd: 0.35 deg/h}", "{mean: 0 deg/h, sd: 0.35 deg}", "an angular rate was expected"},
		"no spread":         {"{mean: 0 deg/h, sd: 0.35 deg/h}", "{mean: 0 deg/h}", "no spread"},
		"two spreads":       {"{mean: 0 deg/h, sd: 0.35 deg/h}", "{fixed: 0 deg/h, max: 0.35 deg/h}", "no spread"},
		"negative sd":       {"sd: 0.35 deg/h", "sd: -0.35 deg/h", "no spread"},
		"positive and wide": {"sd: 0.00015 deg/sqrt(h)", "sd: 0.001 deg/sqrt(h)", "always above zero"},
		"typing":            {"wavelength-temperature:", "wavelength-temprature:", `no key "wavelength-temprature"`},
	} {
		t.Run(name, func(t *testing.T) {
			bad := strings.Replace(string(text), c.from, c.to, 1)
			if bad == string(text) {
				t.Fatalf("%q does not stand in the document", c.from)
			}
			p, file, problems := LoadPopulation("optical.yaml", []byte(bad))
			var shown strings.Builder
			problems.Render(&shown, file)
			if p != nil || !strings.Contains(shown.String(), c.want) {
				t.Errorf("got %q, want %q", shown.String(), c.want)
			}
		})
	}
}

// TestReadmeShowsTheTableOfParameters: the documentation is made of the table that loads.
func TestReadmeShowsTheTableOfParameters(t *testing.T) {
	file := filepath.Join("populations", "README.md")
	want := "# Populations\n\n" +
		"A population says how the parameters of a kind of gyro are spread. The shipped ones are invented. This page is made from\n" +
		"the tables that read them (`go test ./instruments/virtual -run Readme -update`).\n\n" + reference()
	if *update {
		if err := os.WriteFile(file, []byte(want), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	got, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if string(got) != want {
		t.Errorf("%s is out of date; run with -update", file)
	}
}

// reference is PopulationTable and, of the tables of spreads, which are all alike, one.
func reference() string {
	top := *PopulationTable
	top.Keys = slices.Clone(top.Keys)
	spreads := &top.Keys[len(top.Keys)-1]
	inner := *spreads.Of
	inner.Keys = slices.Clone(inner.Keys)
	for i := range inner.Keys {
		dimension := parameters[i].unit.Dimension()
		inner.Keys[i] = document.Key{Name: inner.Keys[i].Name, Kind: document.Quantity, Dimension: &dimension, Doc: inner.Keys[i].Doc}
	}
	spreads.Of = &inner
	one := *spreadTable(&parameters[0])
	one.Name, one.Doc = "spread", "one of these stands for each quantity above"
	return document.Reference(&top) + "\n" + document.Reference(&one)
}

var update = flag.Bool("update", false, "write what documentation and golden files should be")
