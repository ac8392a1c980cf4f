package reduce

const (
	ieee952  = "IEEE Std 952-1997"
	annexC   = "IEEE Std 952-1997, annex C"
	ieee528  = "IEEE Std 528-2019"
	sp1065   = "NIST SP 1065 (2008), 5.2.4"
	noiseKey = "noise"
)

// catalogue is the table. Reduce answers in Unit.
var catalogue = []Method{
	{Name: "polarity", Unit: ratio, Several: true, Needs: []string{"rate"}, Source: ieee528, Reduce: polarity,
		Doc: "+1 if the output follows the declared sign of rotation, -1 if it is reversed"},
	{Name: "bias", Unit: radPerS, Options: []string{"scale-factor"}, Source: ieee952 + ", 12.8", Reduce: bias,
		Doc: "mean output at rest, the Earth's rate removed"},
	{Name: "bias-instability", Unit: radPerS, Options: []string{"measurand", "scale"}, Measurand: true, Source: annexC, Reduce: biasInstability,
		Doc: "lowest point of the fitted Allan curve, over 0.664"},
	{Name: "angle-random-walk", Unit: walk, Source: annexC, Reduce: coefficient(termN, walk),
		Doc: "N: white noise of the rate, fitted to the Allan curve"},
	{Name: "rate-random-walk", Unit: rateWalk, Source: annexC, Reduce: rateRandomWalk,
		Doc: "K: random walk of the rate, fitted to the Allan curve; an upper bound if not detected"},
	{Name: "quantisation-noise", Unit: radian, Output: "angle", Source: annexC, Reduce: coefficient(termQ, radian),
		Doc: "Q: quantisation of increments of angle, fitted to the Allan curve; an upper bound if not detected"},
	{Name: "allan-deviation", Unit: radPerS, Options: []string{"tau"}, Source: annexC + "; " + sp1065, Reduce: allanDeviation,
		Doc: "overlapping Allan deviation at one averaging time"},
	{Name: "scale-factor", Unit: ratio, Options: []string{noiseKey}, Several: true, Needs: []string{"rate"}, Source: ieee952 + ", 12.7", Reduce: scaleFactor,
		Doc: "slope of the least-squares line, over the nominal scale factor"},
	{Name: "scale-factor-error", Unit: ratio, Options: []string{noiseKey}, Several: true, Needs: []string{"rate"}, Source: ieee952 + ", 12.7", Reduce: scaleFactorError,
		Doc: "scale factor less the nominal one, relative to it"},
	{Name: "scale-factor-nonlinearity", Unit: ratio, Options: []string{noiseKey, "relative-to", "least"}, Several: true, Needs: []string{"rate"}, Source: ieee952 + ", 12.7.4", Reduce: nonlinearity,
		Doc: "greatest residual from the line, relative to the range or to the reading"},
	{Name: "scale-factor-asymmetry", Unit: ratio, Options: []string{noiseKey}, Several: true, Needs: []string{"rate"}, Source: ieee952 + ", 12.7.5", Reduce: asymmetry,
		Doc: "slope at positive less slope at negative rates, relative to the scale factor"},
	{Name: "scale-factor-hysteresis", Unit: ratio, Options: []string{noiseKey}, Several: true, Needs: []string{"rate"}, Source: ieee528, Reduce: hysteresis,
		Doc: "greatest difference between coming to a rate from below and from above, relative to the range"},
	{Name: "repeatability", Unit: radPerS, Options: []string{"measurand"}, Several: true, Needs: []string{"over"}, Measurand: true, Source: ieee528 + "; NIST/SEMATECH e-Handbook 7.2.3", Reduce: repeatability,
		Doc: "scatter of the mean output over turn-ons, in-run noise removed"},
}
