package rehearsal

import (
	"fmt"
	"math"
	"time"

	"proofrate/instruments/virtual"
	"proofrate/limits/quantity"
	"proofrate/procedures"
	"proofrate/results/recording"
	"proofrate/results/reduce"
)

// knower knows the truth of one trial.
type knower struct {
	plan       *procedures.Plan
	truth      *virtual.Truth
	recordings []*recording.Recording
	began      time.Time
	sense      float64
}

// all gives the truth of every figure element: first of what is reduced from recordings, then of formulas, which are
// computed from true figures.
func (k knower) all(figures []procedures.FigureElement) []truth {
	list := make([]truth, len(figures))
	exact := make([]procedures.FigureElement, len(figures))
	for i, f := range figures {
		exact[i] = f
		if f.Method == "formula" {
			continue
		}
		list[i] = k.element(f)
		exact[i].Measured = plain(list[i], f.Measured.Unit)
	}
	for _, figure := range k.plan.Figures {
		if figure.Formula == nil {
			continue
		}
		got := figure.Formula.Evaluate(procedures.Values(exact), figure.Unit, 1)
		for i, n := 0, 0; i < len(figures); i++ {
			if figures[i].Name != figure.Name || n >= len(got) {
				continue
			}
			list[i] = truth{value: got[n].Measured.Value, reason: got[n].Measured.Void}
			exact[i].Measured = plain(list[i], figure.Unit)
			n++
		}
	}
	return list
}

// plain is a true value as a figure without uncertainty.
func plain(t truth, unit quantity.Unit) quantity.Measured {
	if t.reason != "" {
		return quantity.Voided(unit, t.reason)
	}
	m := quantity.T(t.value, unit, nil)
	m.DoF = math.Inf(1)
	return m
}

// element is the truth of one element of a reduced figure.
func (k knower) element(f procedures.FigureElement) truth {
	si, err := k.si(f)
	if err != nil {
		return truth{reason: err.Error()}
	}
	method, _ := reduce.Find(f.Method)
	value, err := quantity.FromSI(si, method.Unit).In(f.Measured.Unit)
	if err != nil {
		return truth{reason: err.Error()}
	}
	return truth{value: value}
}

// si gives the truth in SI, by the figure's definition.
func (k knower) si(f procedures.FigureElement) (float64, error) {
	var windows []virtual.Window
	for _, i := range f.Recordings {
		r := k.recordings[i]
		w, err := k.truth.Window(k.began.Add(time.Duration(r.Start*float64(time.Second))), r.First, r.Len())
		if err != nil {
			return 0, err
		}
		windows = append(windows, w)
	}
	options := k.options(f.Name)
	switch f.Method {
	case "polarity":
		return k.truth.Gyro.Polarity * k.plan.Gyro.Polarity, nil
	case "bias":
		return k.truth.Gyro.Polarity * windows[0].TrueBias(), nil
	case "angle-random-walk":
		return k.truth.N(), nil
	case "rate-random-walk":
		return k.truth.Gyro.K, nil
	case "quantisation-noise":
		return k.truth.Q(), nil
	case "allan-deviation":
		return k.truth.Deviation(options.Tau), nil
	case "bias-instability":
		r := k.recordings[f.Recordings[0]]
		value, _ := k.truth.BiasInstability(reduce.StabilityTaus(r.Len(), r.SampleInterval))
		return value, nil
	case "repeatability":
		if options.Measurand == "population" {
			return k.truth.RepeatabilityPopulation(windows), nil
		}
		return virtual.RepeatabilitySample(windows), nil
	}
	sweep, fullScale := k.sweep(f, windows), k.plan.Gyro.Range.SI()
	switch f.Method {
	case "scale-factor":
		return sweep.Line().Slope, nil
	case "scale-factor-error":
		return sweep.Error(), nil
	case "scale-factor-nonlinearity":
		return sweep.Nonlinearity(fullScale, options.Relative == "reading", options.Least), nil
	case "scale-factor-asymmetry":
		return sweep.Asymmetry(), nil
	case "scale-factor-hysteresis":
		return sweep.Hysteresis(fullScale), nil
	}
	return 0, fmt.Errorf("rehearsal knows no truth of %s", f.Method)
}

// sweep is the noise-free response under the true inputs. What does not come from the input, the centripetal part
// among it, is no part of a scale factor.
func (k knower) sweep(f procedures.FigureElement, windows []virtual.Window) reduce.Sweep {
	p := k.truth.Gyro.Polarity
	var sweep reduce.Sweep
	for n, i := range f.Recordings {
		label, _ := k.recordings[i].Labels.Find("rate")
		w := windows[n]
		sweep = append(sweep, reduce.SweepPoint{Nominal: p * k.sense * label.Value.SI(), Input: p * w.Input, Output: p * w.Response()})
	}
	return sweep
}

func (k knower) options(figure string) reduce.Options {
	for _, f := range k.plan.Figures {
		if f.Name == figure {
			return f.Options
		}
	}
	return reduce.Options{}
}
