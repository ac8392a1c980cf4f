package virtual

import (
	"math/rand/v2"
	"testing"
)

// TestFrameChecksum: the catalogue's check value, and the tables by place against the bytes one after the other.
func TestFrameChecksum(t *testing.T) {
	found := false
	for _, row := range readReference(t, "protocol/crc_catalogue.csv") {
		if row["name"] == "CRC-16/IBM-3740" {
			found = true
			if want := octets(t, row["check"][2:]); crcFrom(0xffff, []byte("123456789")) != uint16(want[0])<<8|uint16(want[1]) {
				t.Errorf("check value %04x, want % x", crcFrom(0xffff, []byte("123456789")), want)
			}
		}
	}
	if !found {
		t.Error("the catalogue lacks CRC-16/IBM-3740")
	}
	r := rand.New(rand.NewPCG(1, 1))
	for range 1000 {
		counter, count, temperature, status := uint16(r.Uint32()), int32(r.Uint32()), int16(r.Uint32()), uint16(r.Uint32())
		f := make([]byte, frameSize)
		putFrame(f, counter, count, temperature, status)
		frames := decode(t, f) // checks the CRC bit by bit
		if got, want := frames[0], (frame{counter, count, temperature, status}); got != want {
			t.Fatalf("%+v, want %+v", got, want)
		}
	}
}
