package virtual

import (
	"encoding/binary"
	"math/rand/v2"
	"strings"
	"testing"
)

// example is the registers of the protocol's worked examples: two addresses, one of them free to write.
type example map[uint16]uint16

func (e example) holding(a uint16) (uint16, bool) { v, ok := e[a]; return v, ok }
func (e example) input(a uint16) (uint16, bool)   { v, ok := e[a]; return v, ok }
func (e example) set(a, v uint16) byte {
	e[a] = v
	return 0
}

// TestModbusPublishedExamples gives the server each worked request of the functions that it knows, as a frame, and
// compares the frame that it answers with.
func TestModbusPublishedExamples(t *testing.T) {
	registers := example{0x6b: 555, 0x6c: 0, 0x6d: 100, 8: 10}
	known := map[string]bool{"03": true, "04": true, "06": true, "10": true}
	n := 0
	for _, row := range readReference(t, "protocol/modbus_pdu_examples.csv") {
		request := octets(t, row["rtu_request"])
		if !known[strings.Fields(row["request_pdu"])[0]] {
			if response := serveModbus(registers, request[1:len(request)-2]); response[0] != request[1]|0x80 || response[1] != illegalFunction {
				t.Errorf("%s: % x, want exception 01", row["function"], response)
			}
			continue
		}
		n++
		address, pdu, took := rtuRequest(request)
		if address != 0x11 || took != len(request) || string(pdu) != string(octets(t, row["request_pdu"])) {
			t.Errorf("%s: read as address %x, PDU % x, %d bytes", row["function"], address, pdu, took)
			continue
		}
		if got, want := rtuFrame(address, serveModbus(registers, pdu)), octets(t, row["rtu_response"]); string(got) != string(want) {
			t.Errorf("%s: % x, want % x", row["function"], got, want)
		}
	}
	if n != 4 {
		t.Errorf("%d functions checked, want 4", n)
	}
	if registers[1] != 0x000a && registers[1] != 3 || registers[2] != 0x0102 {
		t.Errorf("written were %v", registers)
	}
}

func TestModbusPublishedChecksums(t *testing.T) {
	n := 0
	for _, row := range readReference(t, "protocol/modbus_frames.csv") {
		item, _, _ := strings.Cut(row["item"], " (")
		if row["kind"] != "rtu" || len(row["value"]) != 5 || strings.ContainsAny(item, "ghijklmnopqrstuvwxyz") {
			continue
		}
		n++
		frame := octets(t, item)
		got := binary.LittleEndian.AppendUint16(nil, crcModbus(frame))
		if want := octets(t, row["value"]); string(got) != string(want) {
			t.Errorf("CRC of %s: % x, want % x", item, got, want)
		}
		if whole := rtuFrame(frame[0], frame[1:]); crcModbus(whole) != 0 {
			t.Errorf("%s: the CRC of the whole frame is not zero", item)
		}
	}
	if n != 4 {
		t.Errorf("%d checksums compared, want 4", n)
	}
}

// TestModbusFindsRequestsInNoise: whatever stands before, and however it is cut, a sound request is found.
func TestModbusFindsRequestsInNoise(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	request := rtuFrame(1, []byte{writeRegisters, 0, 1, 0, 2, 4, 0, 30, 0, 1})
	for range 2000 {
		noise := make([]byte, r.IntN(12))
		for i := range noise {
			noise[i] = byte(r.Uint32())
		}
		stream := append(append([]byte(nil), noise...), request...)
		_, pdu, n := rtuRequest(stream)
		// Noise may look like the beginning of a longer request, which more bytes then show it not to be.
		if pdu == nil {
			_, pdu, n = rtuRequest(append(stream, make([]byte, 256)...))
		}
		if string(pdu) != string(request[1:len(request)-2]) || n != len(stream) {
			t.Fatalf("noise % x: found % x after %d bytes", noise, pdu, n)
		}
	}
}
