package profile

import (
	"encoding/hex"
	"slices"
	"strconv"
	"strings"

	"proofrate/instruments"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

const (
	frameLeast = 3 // sync, a number, a checksum
	frameMost  = 1024
)

// frame is what a profile of the family frames says.
type frame struct {
	length   int
	sync     []byte
	check    checksum
	from, to int // of the bytes that the checksum covers, to exclusive
	checkAt  int
	checkBig bool
	counter  *field // nil: none
	valid    *field // nil: every frame is a sample
	channels []field
	readings []frameReading
}

// field is a number in a frame.
type field struct {
	at    int
	as    numberKind
	big   bool
	shift uint
	width uint // bits, from shift
}

type frameReading struct {
	name string
	field
	scaling
	unit quantity.Unit
}

// of takes the field out of a frame.
func (f *field) of(p []byte) int64 {
	x := integer(p[f.at:f.at+f.as.bytes], f.as.signed, f.big)
	if f.width == uint(8*f.as.bytes) {
		return x
	}
	left := 64 - f.shift - f.width
	if f.as.signed {
		return x << left >> (left + f.shift)
	}
	return int64(uint64(x) << left >> (left + f.shift))
}

// sound says whether p, a frame's length of bytes, is a frame.
func (f *frame) sound(p []byte) bool {
	for i, b := range f.sync {
		if p[i] != b {
			return false
		}
	}
	return f.check.of(p[f.from:f.to]) == uint32(integer(p[f.checkAt:f.checkAt+f.check.width], false, f.checkBig))
}

// frames reads what a profile of the family frames says.
func (r *reader) frames() {
	m := r.m.Map("frame")
	if !m.Has("length") {
		return
	}
	f := &frame{length: r.between(m, "length", frameLeast, frameMost)}
	if m.Has("sync") {
		sync, err := hex.DecodeString(strings.Join(m.Words("sync"), ""))
		if err != nil || len(sync) == 0 || len(sync) >= f.length {
			r.add(m.ValueSpan("sync"), "wrong-value", "", "sync: bytes in hexadecimal were expected, fewer than the frame has, as in A5 5A")
		}
		f.sync = sync
	}
	if m.Has("checksum") {
		r.checksum(f, m.Map("checksum"))
	}
	if m.Has("counter") {
		f.counter = r.field(f, m.KeySpan("counter"), m.Map("counter"), nil)
		r.p.FrameCounter = true
		if f.counter.as.signed {
			r.add(m.Map("counter").ValueSpan("as"), "wrong-value", "", "a counter has no sign")
		}
	}
	if m.Has("valid") {
		f.valid = r.field(f, m.KeySpan("valid"), m.Map("valid"), nil)
		if f.valid.width != 1 {
			r.add(m.KeySpan("valid"), "wrong-value", "give the key \"bits\", as in bits: 0", "valid is one bit")
		}
	}
	r.p.SampleRate = m.Quantity("rate")
	if m.Has("rate") && !(r.p.SampleRate.Number > 0) {
		r.add(m.ValueSpan("rate"), "wrong-value", "", "rate: frames a second were expected, more than none")
	}
	r.frameChannels(f, m)
	r.frameReadings(f, m)
	r.p.frame = f
}

func (r *reader) big(m document.Map) bool {
	if m.Has("byte-order") {
		return m.Text("byte-order") == "big"
	}
	return r.m.Map("frame").Text("byte-order") == "big"
}

func (r *reader) checksum(f *frame, m document.Map) {
	f.check, f.checkAt, f.checkBig = checksums[m.Text("is")], m.Int("at"), r.big(m)
	if m.Has("at") && (f.checkAt < 0 || f.checkAt+f.check.width > f.length) {
		r.add(m.ValueSpan("at"), "wrong-value", "", "at: the checksum of %d bytes does not lie in the frame of %d", f.check.width, f.length)
	}
	if !m.Has("over") {
		return
	}
	first, last, ok := twoNumbers(m.Words("over"))
	switch {
	case !ok || first < 0 || last < first || last >= f.length:
		r.add(m.ValueSpan("over"), "wrong-value", "", "over: the first and the last byte were expected, from 0 to %d", f.length-1)
	case last >= f.checkAt && first < f.checkAt+f.check.width:
		r.add(m.ValueSpan("over"), "wrong-value", "", "over: a checksum does not cover itself")
	}
	f.from, f.to = first, last+1
}

func twoNumbers(words []string) (a, b int, ok bool) {
	if len(words) != 2 {
		return 0, 0, false
	}
	a, errA := strconv.Atoi(words[0])
	b, errB := strconv.Atoi(words[1])
	return a, b, errA == nil && errB == nil
}

// field reads where a number stands. Keys that only serve other fields are told.
func (r *reader) field(f *frame, at source.Span, m document.Map, serve []string) *field {
	got := &field{at: m.Int("at"), as: numberKinds[m.Text("as")], big: r.big(m)}
	got.width = uint(8 * got.as.bytes)
	for _, key := range []string{"count", "scale", "offset", "unit"} {
		if m.Stands(key) && !slices.Contains(serve, key) {
			r.add(m.KeySpan(key), "unused-key", "leave it out", "nothing uses %s here", key)
		}
	}
	if m.Has("at") && m.Has("as") && (got.at < 0 || got.at+got.as.bytes > f.length) {
		r.add(m.ValueSpan("at"), "wrong-value", "", "at: the field of %d bytes does not lie in the frame of %d", got.as.bytes, f.length)
	}
	if !m.Has("bits") || !m.Has("as") {
		return got
	}
	words := m.Words("bits")
	if len(words) == 1 {
		words = append(words, words[0])
	}
	low, high, ok := twoNumbers(words)
	if !ok || low < 0 || high < low || high >= 8*got.as.bytes {
		r.add(m.ValueSpan("bits"), "wrong-value", "", "bits: the lowest and the highest were expected, from 0 to %d", 8*got.as.bytes-1)
		return got
	}
	got.shift, got.width = uint(low), uint(high-low+1)
	return got
}

// channelDimensions are those of the first part of a channel's name; the second is an axis.
var channelDimensions = map[string]quantity.Dimension{"rate": quantity.AngularRate, "angle": quantity.Angle}

func (r *reader) frameChannels(f *frame, m document.Map) {
	list := r.entries(m, "channels")
	if n := m.Node("channels"); n != nil && n.Form == document.Mapping && len(list) == 0 {
		r.add(n.Span, "wrong-form", "", "a gyro has one channel at least")
	}
	for _, e := range list {
		kind, axis, several := strings.Cut(e.Key.Text(), ".")
		dimension, known := channelDimensions[kind]
		field := document.Decode(e.Value, &fieldTable, r.problems)
		f.channels = append(f.channels, *r.field(f, e.Key.Span, field, []string{"count"}))
		count := field.Quantity("count")
		r.p.Channels = append(r.p.Channels, instruments.Channel{Name: e.Key.Text(), Count: count})
		switch {
		case !known || several && axis != "x" && axis != "y" && axis != "z":
			r.add(e.Key.Span, "unknown-channel", source.DidYouMean(e.Key.Text(), []string{"rate", "angle", "rate.x", "rate.y", "rate.z", "angle.x", "angle.y", "angle.z"}), "a gyro has no channel %q", e.Key.Text())
		case !field.Stands("count"):
			r.add(e.Key.Span, "missing-key", "units that fit: "+unitsOf(dimension), "the channel %s needs the key \"count\"", e.Key.Text())
		case field.Has("count") && count.Dimension() != dimension:
			r.add(field.ValueSpan("count"), "wrong-unit", "units that fit: "+unitsOf(dimension), "%s is a unit of %s, and a count of %s is of %s", count.Unit, count.Dimension(), e.Key.Text(), dimension)
		case field.Has("count") && !(count.Number > 0):
			r.add(field.ValueSpan("count"), "wrong-value", "the bench file states the sense", "count: more than nothing was expected")
		}
	}
	if one := len(r.p.Channels) == 1; one && channelDimensions[r.p.Channels[0].Name] != (quantity.Dimension{}) {
		r.p.Readings["gyro"] = append(r.p.Readings["gyro"], gyroRate)
	}
}

func (r *reader) frameReadings(f *frame, m document.Map) {
	for _, e := range r.entries(m, "readings") {
		field := document.Decode(e.Value, &fieldTable, r.problems)
		unit, ok := r.readingOf(e.Key, field)
		if ok && !field.Stands("unit") {
			r.add(e.Key.Span, "missing-key", "", "the reading %s needs the key \"unit\"", e.Key.Text())
		}
		f.readings = append(f.readings, frameReading{e.Key.Text(), *r.field(f, e.Key.Span, field, []string{"scale", "offset", "unit"}), r.scaling(field), unit})
	}
}
