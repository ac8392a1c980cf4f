//go:build unix

package virtual

import (
	"context"
	"errors"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
)

// TestServerOffersTheBenchOnPorts drives it as a program of its own would: through serial ports and TCP.
func TestServerOffersTheBenchOnPorts(t *testing.T) {
	const pace = 20
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	server, err := Offer(w)
	if err != nil {
		t.Fatal(err)
	}
	stopped := errors.New("end of the test")
	ctx, stop := context.WithCancelCause(context.Background())
	done := make(chan error, 1)
	go func() { done <- server.Run(ctx, pace) }()

	clock := link.ScaledClock(pace)
	links := map[string]link.Link{}
	for _, e := range server.Endpoints() {
		kind, address, _ := strings.Cut(e.Address, ":")
		var l link.Link
		if kind == "serial" {
			l, err = link.OpenSerial(ctx, address, link.SerialSettings{Baud: 115200, DataBits: 8, Parity: link.ParityNone, StopBits: 1}, clock)
		} else {
			l, err = link.DialTCP(ctx, address, clock)
		}
		if err != nil {
			t.Fatal(e, err)
		}
		defer l.Close()
		links[e.Name] = l
	}
	if len(links) != 4 {
		t.Fatalf("offered are %v", server.Endpoints())
	}
	// Five seconds of the wall, so that a busy machine does not fail the test.
	await := func(l link.Link, enough func(p []byte) bool) []byte {
		t.Helper()
		for until := clock.Now().Add(pace * 5 * time.Second); clock.Now().Before(until); {
			if p := l.Peek(); enough(p) {
				return append([]byte(nil), p...)
			}
			if err := l.Await(ctx, until); err != nil {
				t.Fatal(err)
			}
		}
		t.Fatalf("got only %q", l.Peek())
		return nil
	}
	line := func(p []byte) bool { return strings.HasSuffix(string(p), "\n") }
	say(t, links["table"], "*IDN?\r")
	if got := string(await(links["table"], line)); got != "PROOFRATE,VIRTUAL TABLE,VT-0001,1.0\r\n" {
		t.Errorf("the table says %q", got)
	}
	if err := links["chamber"].Send(rtuFrame(1, []byte{4, 0, 16, 0, 1})); err != nil {
		t.Fatal(err)
	}
	got := await(links["chamber"], func(p []byte) bool { return len(p) >= 7 })
	if want := string(rtuFrame(1, []byte{4, 2, 0x04, 0xb1})); string(got) != want {
		t.Errorf("the chamber says % x, want % x", got, want)
	}
	for _, command := range []string{"VOLT 5,(@1)", "CURR 3.5,(@1)", "OUTP ON,(@1)", "OUTP? (@1)"} {
		say(t, links["supply"], command)
	}
	if got := string(await(links["supply"], line)); got != "1\n" {
		t.Errorf("the supply says %q", got)
	}
	frames := await(links["gyro-1"], func(p []byte) bool { return len(p) >= 300*frameSize })
	for i, f := range decode(t, frames[:300*frameSize]) {
		if f.counter != uint16(i) {
			t.Fatalf("frame %d has the counter %d", i, f.counter)
		}
	}
	stop(stopped)
	if err := <-done; !errors.Is(err, stopped) {
		t.Errorf("Run ended with %v", err)
	}
	if err := server.Close(); err != nil {
		t.Error(err)
	}
}
