package virtual

import (
	"math"
	"time"

	"proofrate/instruments/link"
)

const (
	chamberAddress  = 1
	chamberDelay    = 20 * time.Millisecond
	chamberModel    = 1201
	chamberSerial   = 770001
	chamberFirmware = 104 // hundredths
	chamberRampMax  = 100 // tenths of K/min
	// requestGap is the silence after which the rest of a request is given up. The standard's 3.5 characters would ask
	// too much of a bench that is offered on ports at a pace.
	requestGap = int64(time.Second)
)

// chamber is the thermal chamber behind its Modbus RTU registers.
type chamber struct {
	w         *World
	climate   *climate
	low, high float64   // degC
	own       float64   // K/s, its own ramp
	hidden    deviation // of its thermometer

	setPoint int16  // 0.1 degC
	ramp     uint16 // 0.1 K/min; 0: its own

	device *link.Device
	heard  int64 // ns, when the last bytes came
	left   int   // bytes of them that are no whole request yet
	busy   int64
}

func (c *chamber) attach(d *link.Device) {
	c.device, c.left = d, 0
	d.OnSend(c.received)
}

func (c *chamber) received() {
	if c.w.now-c.heard > requestGap {
		c.device.Received()
		c.device.Discard(c.left) // silence ends a frame: this is not the rest of an older one
	}
	c.heard = c.w.now
	for {
		got := c.device.Received()
		address, pdu, n := rtuRequest(got)
		if n == 0 || pdu == nil {
			c.device.Discard(n)
			c.left = len(got) - n
			return
		}
		c.answer(address, pdu)
		c.device.Discard(n)
	}
}

// answer carries out one request. A broadcast is carried out and not answered, one to another server is neither.
func (c *chamber) answer(address byte, pdu []byte) {
	if address != chamberAddress && address != 0 {
		return
	}
	response := serveModbus(c, pdu)
	if address == 0 {
		return
	}
	c.busy = max(c.busy, c.w.now) + int64(chamberDelay)
	c.device.Deliver(rtuFrame(chamberAddress, response), moment(c.busy))
}

func (c *chamber) holding(address uint16) (uint16, bool) {
	switch address {
	case 0:
		return uint16(c.setPoint), true
	case 1:
		return c.ramp, true
	case 2:
		return uint16(btoi(c.climate.on)), true
	}
	return 0, false
}

func (c *chamber) input(address uint16) (uint16, bool) {
	switch address {
	case 0:
		return uint16(int16(math.Round(100 * c.hidden.said(c.climate.air())))), true
	case 1:
		return uint16(btoi(c.climate.on) + btoi(c.climate.reached())), true
	case 16:
		return chamberModel, true
	case 17:
		return uint16(chamberSerial >> 16), true
	case 18:
		return uint16(chamberSerial & 0xffff), true
	case 19:
		return chamberFirmware, true
	}
	return 0, false
}

func (c *chamber) set(address, value uint16) (exception byte) {
	on := c.climate.on
	switch address {
	case 0:
		if t := float64(int16(value)) / 10; t < c.low || t > c.high {
			return illegalValue
		}
		c.setPoint = int16(value)
	case 1:
		if value > chamberRampMax {
			return illegalValue
		}
		c.ramp = value
	case 2:
		if value > 1 {
			return illegalValue
		}
		on = value == 1
	default:
		return illegalAddress
	}
	if !on {
		c.climate.off()
		return 0
	}
	ramp := c.own
	if c.ramp > 0 {
		ramp = float64(c.ramp) / 600
	}
	c.climate.set(float64(c.setPoint)/10, ramp)
	return 0
}

func btoi(b bool) int {
	if b {
		return 1
	}
	return 0
}
