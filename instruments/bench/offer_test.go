package bench

import (
	"context"
	"errors"
	"math"
	"os"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/virtual"
	"proofrate/limits/quantity"
)

func TestOnPortsKeepsTheAuthorsText(t *testing.T) {
	text := strings.Replace(base(t), "table:\n", "# the table stands on its own pier\ntable:\n", 1)
	loaded, _, wrong := Load("base.yaml", []byte(text), os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	links := map[string]string{"table": "serial:/dev/pts/1", "chamber": "serial:/dev/pts/2", "supply": "tcp:127.0.0.1:40001",
		"gyro-1": "serial:/dev/pts/3", "gyro-2": "serial:/dev/pts/4"}
	got, err := loaded.OnPorts(links, 60)
	if err != nil {
		t.Fatal(err)
	}
	want := text[:strings.Index(text, "virtual:\n  ambient")] + "pace: 60\n"
	for endpoint, to := range links {
		want = strings.Replace(want, "link: virtual:"+endpoint, "link: "+to, 1)
	}
	if string(got) != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	delete(links, "gyro-2")
	if _, err := loaded.OnPorts(links, 60); err == nil || !strings.Contains(err.Error(), "G2") {
		t.Errorf("with no port for G2: %v", err)
	}
}

// TestBenchOverPorts drives the small bench over pseudo-terminals and TCP, through the real serial links, while the
// virtual world runs at thirty times the wall's pace.
func TestBenchOverPorts(t *testing.T) {
	const pace = 30
	inside, _, wrong := Load("base.yaml", []byte(base(t)), os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	config := *inside.world
	config.Seed = 1
	world, err := virtual.New(config)
	if err != nil {
		t.Fatal(err)
	}
	server, err := virtual.Offer(world)
	if err != nil {
		t.Skipf("no ports here: %v", err)
	}
	ctx, stop := context.WithCancelCause(t.Context())
	ended := errors.New("the test has ended")
	done := make(chan error, 1)
	go func() { done <- server.Run(ctx, pace) }()
	defer func() {
		stop(ended)
		if err := <-done; !errors.Is(err, ended) {
			t.Errorf("server: %v", err)
		}
		if err := server.Close(); err != nil {
			t.Error(err)
		}
	}()
	links := map[string]string{}
	for _, e := range server.Endpoints() {
		links[e.Name] = e.Address
	}
	text, err := inside.OnPorts(links, pace)
	if err != nil {
		t.Fatal(err)
	}
	loaded, _, wrong := Load("ports.yaml", text, os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	o, err := Open(t.Context(), loaded, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := o.Close(); err != nil {
			t.Error(err)
		}
	}()
	power(t, o, 0, 5, 10*time.Second)
	if err := o.Table.SetRate(t.Context(), quantity.Of(30, degPerS), quantity.Of(60, degPerS2)); err != nil {
		t.Fatal(err)
	}
	if err := o.Clock.Sleep(t.Context(), 10*time.Second); err != nil {
		t.Fatal(err)
	}
	rate, err := instruments.Read(t.Context(), o.Table, "table.rate")
	if err != nil || math.Abs(rate.Value.As(degPerS)-30) > 0.01 {
		t.Errorf("table.rate %v, %v", rate.Value, err)
	}
	var batch instruments.Batch
	gyro := o.Slots[0].Gyro
	if err := gyro.Drain(t.Context(), &batch); err != nil {
		t.Fatal(err)
	}
	batch.Reset()
	if err := o.Clock.Sleep(t.Context(), 10*time.Second); err != nil {
		t.Fatal(err)
	}
	if err := gyro.Drain(t.Context(), &batch); err != nil {
		t.Fatal(err)
	}
	if batch.Len() < 500 || batch.Damaged > 0 || len(batch.Gaps) > 0 {
		t.Errorf("%d samples in 10 s, %d damaged, gaps %v", batch.Len(), batch.Damaged, batch.Gaps)
	}
	if got := meanRate(o, 0, batch, degPerS); math.Abs(got-30) > 0.05 {
		t.Errorf("mean of the counts: %.4f deg/s at 30 deg/s", got)
	}
	if err := o.Table.Stop(t.Context()); err != nil {
		t.Error(err)
	}
}
