package profile

import (
	"bytes"
	"encoding/hex"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"proofrate/instruments"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// frame says how a stream's frames are laid out.
type frame struct {
	length   int
	sync     []byte
	big      bool
	check    checksum
	from, to int // of the bytes that the checksum covers, to exclusive
	checkAt  int
	counter  *field
	valid    *field
	channels []field
	readings []frameReading
}

// field is a number in a frame.
type field struct {
	at     int
	as     numberKind
	hasBit bool
	bit    int
}

type frameReading struct {
	name string
	field
	scale float64
	unit  quantity.Unit
}

// getNumber takes a number out of bytes.
func getNumber(p []byte, signed, big bool) int64 {
	var x uint64
	if big {
		for _, b := range p {
			x = x<<8 | uint64(b)
		}
	} else {
		for i := len(p) - 1; i >= 0; i-- {
			x = x<<8 | uint64(p[i])
		}
	}
	if shift := 64 - 8*len(p); signed {
		return int64(x<<shift) >> shift
	}
	return int64(x)
}

// of takes the field out of a frame.
func (f *field) of(p []byte, big bool) int64 {
	x := getNumber(p[f.at:f.at+f.as.bytes], f.as.signed, big)
	if f.hasBit {
		return x >> f.bit & 1
	}
	return x
}

// sound says whether p begins with a whole frame.
func (f *frame) sound(p []byte) bool {
	if !bytes.HasPrefix(p, f.sync) {
		return false
	}
	want := uint32(getNumber(p[f.checkAt:f.checkAt+f.check.width], false, f.big))
	return f.check.of(p[f.from:f.to]) == want
}

// frames reads the family's part of a profile.
func (r *reader) frames() {
	m := r.map_.Map("frame")
	if !m.Has("length") || !m.Has("sync") || !m.Has("channels") {
		return
	}
	f := &frame{length: m.Int("length"), big: m.Text("byte-order") == "big"}
	if f.length < 3 || f.length > 1024 {
		r.add(m.ValueSpan("length"), "wrong-value", "", "length: 3 to 1024 bytes were expected")
		return
	}
	sync, err := hex.DecodeString(strings.Join(m.Words("sync"), ""))
	if err != nil || len(sync) == 0 || len(sync) >= f.length {
		r.add(m.ValueSpan("sync"), "wrong-value", "", "sync: bytes in hexadecimal were expected, as in A5 5A")
		return
	}
	f.sync = sync
	r.checksum(f, m.Map("checksum"))
	if m.Has("counter") {
		f.counter = r.field(f, m.Map("counter"))
		r.p.FrameCounter = true
	}
	if m.Has("valid") {
		f.valid = r.field(f, m.Map("valid"))
		if !m.Map("valid").Has("bit") {
			r.add(m.KeySpan("valid"), "missing-key", "", "valid is one bit; give the key \"bit\"")
		}
	}
	r.p.SampleRate = m.Quantity("rate")
	r.frameChannels(f, m.Node("channels"))
	r.frameReadings(f, m.Node("readings"))
	r.p.decoding = f
}

func (r *reader) checksum(f *frame, m document.Map) {
	f.check, f.checkAt = checksums[m.Text("is")], m.Int("at")
	from, to, ok := strings.Cut(m.Text("over"), " ")
	a, errA := strconv.Atoi(from)
	b, errB := strconv.Atoi(to)
	switch {
	case !m.Has("is") || !m.Has("over") || !m.Has("at"):
	case !ok || errA != nil || errB != nil || a < 0 || b < a || b >= f.length:
		r.add(m.ValueSpan("over"), "wrong-value", "", "over: the first and the last byte were expected, from 0 to %d", f.length-1)
	case f.checkAt < 0 || f.checkAt+f.check.width > f.length:
		r.add(m.ValueSpan("at"), "wrong-value", "", "at: the checksum does not lie in the frame")
	default:
		f.from, f.to = a, b+1
	}
}

func (r *reader) field(f *frame, m document.Map) *field {
	got := &field{at: m.Int("at"), as: numberKinds[m.Text("as")], hasBit: m.Has("bit"), bit: m.Int("bit")}
	switch {
	case !m.Has("at") || !m.Has("as"):
	case got.at < 0 || got.at+got.as.bytes > f.length:
		r.add(m.ValueSpan("at"), "wrong-value", "", "at: the field does not lie in the frame of %d bytes", f.length)
	case got.hasBit && (got.bit < 0 || got.bit >= 8*got.as.bytes):
		r.add(m.ValueSpan("bit"), "wrong-value", "", "bit: 0 to %d were expected", 8*got.as.bytes-1)
	}
	return got
}

func (r *reader) frameChannels(f *frame, n *document.Node) {
	if n.Form != document.Mapping || len(n.Entries()) == 0 {
		r.add(n.Span, "wrong-form", "", "channels: a map with rate or angle was expected, this is %s", n.Form)
		return
	}
	for _, e := range n.Entries() {
		kind, axis, _ := strings.Cut(e.Key.Text(), ".")
		want, ok := map[string]quantity.Dimension{"rate": quantity.AngularRate, "angle": quantity.Angle}[kind]
		if !ok || strings.HasSuffix(e.Key.Text(), ".") || axis != "" && axis != "x" && axis != "y" && axis != "z" {
			r.add(e.Key.Span, "unknown-channel", source.DidYouMean(kind, []string{"rate", "angle"}), "a gyro has no channel %q", e.Key.Text())
			continue
		}
		m := document.Decode(e.Value, &fieldTable, r.problems)
		if !m.Has("count") || m.Quantity("count").Dimension() != want {
			r.add(e.Key.Span, "wrong-dimension", "state count: with a unit such as "+unitOf(want), "channel %s needs what one count is worth, in a unit of %s", e.Key.Text(), want)
			continue
		}
		f.channels = append(f.channels, *r.field(f, m))
		r.p.Channels = append(r.p.Channels, instruments.Channel{Name: e.Key.Text(), Count: m.Quantity("count")})
	}
}

func (r *reader) frameReadings(f *frame, n *document.Node) {
	if n == nil {
		return
	}
	if n.Form != document.Mapping {
		r.add(n.Span, "wrong-form", "", "readings: a map of names was expected, this is %s", n.Form)
		return
	}
	for _, e := range n.Entries() {
		m := document.Decode(e.Value, &fieldTable, r.problems)
		unit, ok := r.readingOf(e.Key, m)
		if !ok {
			continue
		}
		reading := frameReading{name: e.Key.Text(), field: *r.field(f, m), scale: 1, unit: unit}
		if m.Has("scale") {
			reading.scale = m.Number("scale")
		}
		f.readings = append(f.readings, reading)
	}
	slices.SortFunc(f.readings, func(a, b frameReading) int { return strings.Compare(a.name, b.name) })
}

// decoder takes frames off a stream.
type decoder struct {
	*frame
	span    uint64 // of the counter; 0: there is none
	next    uint64 // counter of the next frame, wraps removed
	started bool
	newest  []byte // the newest frame
	skipped uint64 // bytes thrown away since the last sound frame
}

func newDecoder(f *frame) *decoder {
	d := &decoder{frame: f, newest: make([]byte, 0, f.length)}
	if f.counter != nil {
		d.span = 1 << (8 * f.counter.as.bytes)
	}
	return d
}

// take decodes all whole frames of p into the batch and gives how many bytes it has used up.
//
// Damage costs the damaged frame and no other: after a frame that is not sound the search goes on at the very next
// byte, so that a sync pattern inside the damage cannot hide the frame behind it.
func (d *decoder) take(p []byte, batch *instruments.Batch) (used int) {
	n := d.length
	for len(p)-used >= n {
		at := p[used:]
		if d.sound(at[:n]) {
			d.frameIn(at[:n], batch)
			used += n
			continue
		}
		if bytes.HasPrefix(at, d.sync) {
			batch.Damaged++
		}
		// The next place where a frame can begin.
		skip := bytes.IndexByte(at[1:], d.sync[0])
		if skip < 0 {
			skip = len(at) - 1
		}
		used += 1 + skip
	}
	return used
}

// frameIn adds a sound frame.
func (d *decoder) frameIn(p []byte, batch *instruments.Batch) {
	d.newest = append(d.newest[:0], p...)
	counter := d.next
	if d.counter != nil {
		got := uint64(d.counter.of(p, d.big)) & (d.span - 1)
		if !d.started {
			counter = got
		} else {
			counter = d.next + (got-d.next)&(d.span-1)
		}
	}
	lost := counter - d.next
	if !d.started {
		lost = 0
	}
	d.started = true
	d.next = counter + 1
	if d.valid != nil && d.valid.of(p, d.big) == 0 {
		return
	}
	if batch.Len() == 0 {
		batch.First = counter
		if len(batch.Counts) != len(d.channels) {
			batch.Counts = make([][]int64, len(d.channels))
		}
	}
	if lost > 0 {
		batch.Gaps = append(batch.Gaps, instruments.Gap{Before: batch.Len(), Lost: lost})
	}
	for i := range d.channels {
		batch.Counts[i] = append(batch.Counts[i], d.channels[i].of(p, d.big))
	}
}

// restart forgets the counter.
func (d *decoder) restart() { d.started, d.next, d.newest = false, 0, d.newest[:0] }

func (f *frame) String() string { return fmt.Sprintf("frames of %d bytes", f.length) }
