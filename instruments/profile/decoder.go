package profile

import (
	"bytes"

	"proofrate/instruments"
)

// decoder takes frames off a stream, about thirty million a second on one core.
type decoder struct {
	*frame
	begun   bool   // a frame has come since the restart
	next    uint64 // counter of the next frame, wraps removed
	sampled bool   // a sample has come since the restart
	due     uint64 // counter of the next sample
	skipped int    // bytes since the last frame that belong to none; what comes first may be the rest of a frame

	newest       []byte // frame
	newestSample []byte // frame with a valid output
}

func newDecoder(f *frame) *decoder {
	d := &decoder{frame: f}
	d.restart()
	return d
}

// restart forgets the counter and the newest frame.
func (d *decoder) restart() {
	*d = decoder{frame: d.frame, skipped: 1 - d.length, newest: d.newest[:0], newestSample: d.newestSample[:0]}
}

// take adds the whole frames of p to the batch and gives how many bytes it has used up.
//
// Damage costs the damaged frame and no other: where no frame is, the search goes on at the very next byte that can
// begin one, so that a sync pattern inside the damage cannot hide the frame behind it.
func (d *decoder) take(p []byte, batch *instruments.Batch) (used int) {
	n := d.length
	var newest, sample []byte
	previous := d.newest
	for len(p)-used >= n {
		at := p[used : used+n]
		if !d.sound(at) {
			skip := 1 + bytes.IndexByte(p[used+1:], d.sync[0])
			if skip == 0 {
				skip = len(p) - used
			}
			d.skip(skip, batch)
			used += skip
			continue
		}
		d.found(batch)
		used += n
		if d.counter != nil && d.repeated(at, previous) {
			batch.Damaged++
			continue
		}
		if d.frameIn(at, batch) {
			sample = at
		}
		newest, previous = at, at
	}
	if newest != nil {
		d.newest = append(d.newest[:0], newest...)
	}
	if sample != nil {
		d.newestSample = append(d.newestSample[:0], sample...)
	}
	return used
}

// skip counts a frame thrown away for each length of bytes that belong to none.
func (d *decoder) skip(n int, batch *instruments.Batch) {
	d.skipped += n
	for d.skipped >= d.length {
		d.skipped -= d.length
		batch.Damaged++
	}
}

// found closes a stretch of bytes that belong to no frame. What is left of it counts as a frame: bytes were lost, or
// more came than were sent.
func (d *decoder) found(batch *instruments.Batch) {
	if d.skipped > 0 {
		batch.Damaged++
	}
	d.skipped = 0
}

// repeated says whether a frame is the one before once more, to the last byte.
func (d *decoder) repeated(p, previous []byte) bool {
	return d.begun && bytes.Equal(p, previous)
}

// frameIn counts a frame and, if its output is valid, adds its sample. A gap lies between two samples: frames lost, and
// frames whose output was not valid.
func (d *decoder) frameIn(p []byte, batch *instruments.Batch) (valid bool) {
	counter := d.next
	if d.counter != nil {
		mask := uint64(1)<<d.counter.width - 1
		if got := uint64(d.counter.of(p)); d.begun {
			counter += (got - d.next) & mask
		} else {
			counter = got
		}
	}
	d.begun, d.next = true, counter+1
	if d.valid != nil && d.valid.of(p) == 0 {
		return false
	}
	if batch.Len() == 0 {
		batch.First = counter
	}
	if d.sampled && counter > d.due {
		batch.Gaps = append(batch.Gaps, instruments.Gap{Before: batch.Len(), Lost: counter - d.due})
	}
	d.sampled, d.due = true, counter+1
	for i := range d.channels {
		batch.Counts[i] = append(batch.Counts[i], d.channels[i].of(p))
	}
	return true
}

// lookBack is how many whole frames newestOf looks at.
const lookBack = 8

// newestOf finds the newest sound frame in p, which begins where a frame does unless damage stands there; nil if there
// is none among the last. It changes nothing.
func (d *decoder) newestOf(p []byte, valid bool) []byte {
	last := len(p) / d.length
	for k := last; k > 0 && k > last-lookBack; k-- {
		at := p[(k-1)*d.length : k*d.length]
		if d.sound(at) && (!valid || d.valid == nil || d.valid.of(at) != 0) {
			return at
		}
	}
	return nil
}
