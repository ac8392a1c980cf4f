// Package instrumentstest holds drivers to the contracts of package instruments under go test.
//
// Each Test function opens a driver and reports as errors what the conformance suite of its role finds. A Pacer is
// a clock that nothing but waiting moves; OverMemory makes the rig of a scripted peer over a link in memory.
//
//	func TestConformance(t *testing.T) { instrumentstest.TestTable(t, openTable) }
package instrumentstest

import (
	"context"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
)

// TestTable holds a table to CheckTable.
func TestTable(t *testing.T, open func(testing.TB) (instruments.Table, instruments.Clock)) {
	t.Helper()
	table, clock := open(t)
	report(t, instruments.CheckTable(t.Context(), clock, table))
}

// TestChamber holds a chamber to CheckChamber.
func TestChamber(t *testing.T, open func(testing.TB) (instruments.Chamber, instruments.Clock)) {
	t.Helper()
	chamber, clock := open(t)
	report(t, instruments.CheckChamber(t.Context(), clock, chamber))
}

// TestSupply holds a supply to CheckSupply.
func TestSupply(t *testing.T, open func(testing.TB) (instruments.Supply, instruments.Clock)) {
	t.Helper()
	supply, clock := open(t)
	report(t, instruments.CheckSupply(t.Context(), clock, supply))
}

// TestGyro holds a powered gyro to CheckGyro.
func TestGyro(t *testing.T, open func(testing.TB) (instruments.Gyro, instruments.Clock)) {
	t.Helper()
	gyro, clock := open(t)
	report(t, instruments.CheckGyro(t.Context(), clock, gyro))
}

// TestDriver holds a driver to CheckDriver.
func TestDriver(t *testing.T, rig instruments.Rig) {
	t.Helper()
	report(t, instruments.CheckDriver(t.Context(), rig))
}

func report(t *testing.T, findings []instruments.Finding) {
	t.Helper()
	for _, f := range findings {
		if f.Skipped {
			t.Log(f)
		} else {
			t.Error(f)
		}
	}
}

// OverMemory is an instruments.Rig's Open: the driver that open makes of a link in memory, against a scripted peer.
func OverMemory(open func(link.Link) (instruments.Reader, error)) func(instruments.Peer) (instruments.Bed, error) {
	return func(peer instruments.Peer) (instruments.Bed, error) {
		pacer := NewPacer()
		host, device := link.Memory(pacer, "peer")
		device.OnSend(func() {
			request := append([]byte(nil), device.Received()...)
			device.Discard(len(request))
			now := pacer.Now()
			for _, part := range peer(request) {
				device.Deliver(part.Bytes, now.Add(part.After))
			}
		})
		driver, err := open(host)
		return instruments.Bed{Clock: pacer, Driver: driver, Close: host.Close}, err
	}
}

// Pacer is a link.Pacer with no world behind it: its time moves only while somebody waits.
type Pacer struct{ now time.Time }

// NewPacer starts at a fixed time.
func NewPacer() *Pacer { return &Pacer{time.Date(2026, 3, 2, 7, 30, 0, 0, time.UTC)} }

// Now is the pacer's time.
func (p *Pacer) Now() time.Time { return p.now }

// Sleep lets d pass.
func (p *Pacer) Sleep(ctx context.Context, d time.Duration) error {
	return p.Advance(ctx, p.now.Add(d), nil)
}

// Advance lets the time pass up to until.
func (p *Pacer) Advance(ctx context.Context, until time.Time, _ func() bool) error {
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	if until.After(p.now) {
		p.now = until
	}
	return nil
}
