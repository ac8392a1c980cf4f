package virtual

import (
	"bytes"
	"math"
	"strconv"
	"time"

	"proofrate/instruments/link"
)

// lineMax bounds a command line; what is longer is thrown away and refused as one.
const lineMax = 256

// lines is the text side of an instrument: it takes whole lines off its link, has them carried out as they arrive, and
// answers each after a delay, in order.
type lines struct {
	w      *World
	end    string        // of an answer; a command ends with LF, with or without CR before
	delay  time.Duration // from the line to its answer
	do     func(line string) (answer string, answers bool)
	device *link.Device
	busy   int64 // ns, until when earlier answers take
}

func (l *lines) attach(d *link.Device) {
	l.device = d
	d.OnSend(l.received)
}

func (l *lines) received() {
	for {
		got := l.device.Received()
		n := bytes.IndexByte(got, '\n')
		if n < 0 {
			if len(got) > lineMax {
				l.device.Discard(len(got) - 1) // the rest of it will be refused
			}
			return
		}
		line := string(bytes.TrimSuffix(got[:n], []byte("\r")))
		l.device.Discard(n + 1)
		answer, answers := l.do(line)
		if !answers {
			continue
		}
		l.busy = max(l.busy, l.w.now) + int64(l.delay)
		l.device.Deliver([]byte(answer+l.end), moment(l.busy))
	}
}

// decimal reads a finite number.
func decimal(text string) (float64, bool) {
	x, err := strconv.ParseFloat(text, 64)
	return x, err == nil && !math.IsNaN(x) && !math.IsInf(x, 0)
}
