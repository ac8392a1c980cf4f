package virtual

import (
	"math"
	"regexp"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
)

// TestSupplySpeaks: each line and what the supply answers, or what stands in its error queue afterwards.
func TestSupplySpeaks(t *testing.T) {
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	l := connect(t, w, "supply")
	for _, c := range []struct{ line, answer, failure string }{
		{"*IDN?", "PROOFRATE,VIRTUAL SUPPLY,VS-0001,1.0", "0"},
		{"VOLT 5.000,(@1)", "", "0"}, {"VOLT? (@1)", "+5.00000E+00", "0"},
		{"CURR 1.500,(@1)", "", "0"}, {"curr? (@1)", "+1.50000E+00", "0"},
		{":VOLTAGE 3.3, (@4)", "", "0"}, {"voltage? (@4)", "+3.30000E+00", "0"},
		{"OUTP? (@1)", "0", "0"}, {"OUTP ON,(@1)", "", "0"}, {"OUTP? (@1)", "1", "0"}, {"OUTP? (@2)", "0", "0"},
		{"OUTPUT 0,(@1)", "", "0"}, {"OUTP? (@1)", "0", "0"}, {"*OPC?", "1", "0"},
		{"VOLT 61,(@1)", "", "-222"}, {"VOLT -1,(@1)", "", "-222"}, {"CURR 9,(@1)", "", "-222"}, {"VOLT? (@1)", "+5.00000E+00", "0"},
		{"VOLT 5,(@5)", "", "-222"}, {"VOLT 5,(@0)", "", "-222"}, {"VOLT 5,(@12)", "", "-222"},
		{"VOLT five,(@1)", "", "-104"}, {"VOLT NaN,(@1)", "", "-104"}, {"OUTP MAYBE,(@1)", "", "-224"},
		{"VOLT 5", "", "-109"}, {"VOLT (@1)", "", "-109"}, {"MEAS:VOLT?", "", "-109"}, {"*IDN? (@1)", "", "-108"}, {"VOLT? 3,(@1)", "", "-108"},
		{"VOLTA 5,(@1)", "", "-113"}, {"MEAS:POW? (@1)", "", "-113"}, {"MEAS? (@1)", "", "-113"}, {"VOLT 5,(@1", "", "-102"}, {"", "", "-102"},
	} {
		if c.answer != "" {
			if got := ask(t, l, c.line); got != c.answer {
				t.Errorf("%q: %q, want %q", c.line, got, c.answer)
			}
		} else {
			say(t, l, c.line)
		}
		if got := ask(t, l, "SYST:ERR?"); !strings.HasPrefix(got, c.failure+`,"`) {
			t.Errorf("%q leaves %s, want %s", c.line, got, c.failure)
		}
	}
	for range 30 {
		say(t, l, "NONSENSE")
	}
	var queue []string
	for len(queue) == 0 || queue[len(queue)-1] != scpiNone {
		queue = append(queue, ask(t, l, "SYST:ERR?"))
	}
	if n := len(queue); n != errorsKept+1 || queue[n-2] != `-350,"Queue overflow"` {
		t.Errorf("the queue of errors held %d, last %v", n, queue[len(queue)-2:])
	}
	say(t, l, "NONSENSE")
	say(t, l, "*CLS")
	if got := ask(t, l, "SYST:ERR?"); got != scpiNone {
		t.Errorf("after *CLS: %s", got)
	}
	nr3 := regexp.MustCompile(`^[+-]\d\.\d+E[+-]\d+$`) // IEEE Std 488.2
	if got := ask(t, l, "MEAS:VOLT? (@1)"); !nr3.MatchString(got) {
		t.Errorf("a measured voltage is said as %q", got)
	}
}

// TestSupplyErrorsHaveTheirPublishedCodes: every code that the supply can say stands in the list of SCPI-99.
func TestSupplyErrorsHaveTheirPublishedCodes(t *testing.T) {
	known := map[string]bool{}
	for _, row := range readReference(t, "protocol/scpi_error_codes.csv") {
		known[row["code"]] = true
	}
	for _, message := range []string{scpiNone, scpiSyntax, scpiType, scpiMissing, scpiTooMany, scpiHeader, scpiRange, scpiParameter, scpiOverflow} {
		code, _, _ := strings.Cut(message, ",")
		if !known[code] {
			t.Errorf("%s is no code of SCPI-99", message)
		}
	}
}

// TestSupplyFeedsAndTrips: inrush passes a limit that it exceeds for a moment only; an overload of 20 ms does not.
func TestSupplyFeedsAndTrips(t *testing.T) {
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{
		"A": fixed(t, "optical", "supply-current", "0.6 A", "inrush", "2 A", "inrush-time", "3 ms")}})
	l := connect(t, w, "supply")
	amps := func() float64 {
		x, ok := decimal(ask(t, l, "MEAS:CURR? (@1)"))
		if !ok {
			t.Fatal("no current")
		}
		return x
	}
	say(t, l, "VOLT 5,(@1)")
	say(t, l, "CURR 1,(@1)")
	say(t, l, "OUTP ON,(@1)")
	if got := amps(); math.Abs(got-2.6) > 0.005 {
		t.Errorf("inrush %v A, want 2.6", got)
	}
	sleep(t, w, 100*time.Millisecond)
	if got := amps(); math.Abs(got-0.6) > 0.005 || ask(t, l, "OUTP? (@1)") != "1" {
		t.Errorf("running current %v A, want 0.6, output on", got)
	}
	if got, _ := decimal(ask(t, l, "MEAS:VOLT? (@1)")); math.Abs(got-5) > 0.02 {
		t.Errorf("voltage %v", got)
	}
	say(t, l, "CURR 0.5,(@1)")
	sleep(t, w, 15*time.Millisecond)
	if ask(t, l, "OUTP? (@1)") != "1" {
		t.Error("tripped before 20 ms")
	}
	sleep(t, w, 10*time.Millisecond)
	if ask(t, l, "OUTP? (@1)") != "0" || math.Abs(amps()) > 0.005 || w.gyros[0].on {
		t.Error("an overload goes on")
	}
	// The wrong voltage does not run a gyro.
	for volts, want := range map[string]bool{"4.4": false, "4.6": true, "5.4": true, "5.6": false} {
		for _, line := range []string{"OUTP OFF,(@1)", "CURR 1,(@1)", "VOLT " + volts + ",(@1)", "OUTP ON,(@1)"} {
			say(t, l, line)
		}
		if w.gyros[0].on != want {
			t.Errorf("%s V: on is %v", volts, !want)
		}
	}
}
