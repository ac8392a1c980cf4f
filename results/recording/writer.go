package recording

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"math"
	"os"
	"slices"
	"sync"

	"proofrate/limits/quantity"
)

// FileHead says whose recordings a file holds. It holds no time and no run, so that equal seeds give equal bytes.
type FileHead struct{ Slot, Part, Serial string }

// Writer is a sink that writes one trial's recordings to a file, and keeps them in memory for the evaluation.
//
// A second of samples is in the operating system's hands when it is over. One goroutine syncs the file to the disk,
// asked at each section's end and after five seconds of samples; it ends with Close, which waits for it.
type Writer struct {
	*Memory
	file   *os.File
	whole  hash.Hash
	bytes  int64
	open   []*openSection
	buffer []byte
	failed error // of the file; nothing more is written

	unsynced float64 // s of samples
	wanted   chan struct{}
	synced   sync.WaitGroup
	late     error // of the syncing goroutine, read after it has ended
}

// openSection is what is not yet in the file.
type openSection struct {
	*Recording
	hash     hash.Hash
	written  int // samples in the file
	gaps     int // gaps in the file
	second   int // samples a block
	readings []byte
	taken    int // readings in the buffer
	known    []string
}

// syncEvery is how many seconds of samples may wait for the disk.
const syncEvery = 5.0

// Create makes the file, which must not exist yet.
func Create(path string, head FileHead) (*Writer, error) {
	file, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if err != nil {
		return nil, err
	}
	w := &Writer{Memory: NewMemory(), file: file, whole: sha256.New(), wanted: make(chan struct{}, 1)}
	w.synced.Go(func() {
		for range w.wanted {
			if err := file.Sync(); err != nil {
				w.late = err
			}
		}
	})
	w.put([]byte(magic))
	w.block(blockFile, 0, mustJSON(fileJSON(head)), nil)
	if w.failed != nil {
		w.Close()
		os.Remove(path)
		return nil, w.failed
	}
	return w, nil
}

// put writes bytes. The first failure stays.
func (w *Writer) put(p []byte) {
	if w.failed != nil {
		return
	}
	n, err := w.file.Write(p)
	w.whole.Write(p[:n])
	w.bytes += int64(n)
	if err != nil {
		w.failed = fmt.Errorf("recording %s: %w; what was measured before is kept", w.file.Name(), err)
	}
}

func (w *Writer) block(kind byte, section int, payload []byte, of hash.Hash) {
	w.buffer = appendBlock(w.buffer[:0], kind, section, payload)
	if of != nil {
		of.Write(w.buffer)
	}
	w.put(w.buffer)
}

// Begin opens a section.
func (w *Writer) Begin(s Section) (int, error) {
	id, err := w.Memory.Begin(s)
	if err != nil {
		return 0, err
	}
	o := &openSection{Recording: w.Memory.all[id], hash: sha256.New(), second: max(1, int(math.Round(1/s.SampleInterval)))}
	w.open = append(w.open, o)
	w.block(blockSection, id, mustJSON(s.json()), o.hash)
	return id, w.failed
}

// Append adds samples, and writes those whose bench second is over.
func (w *Writer) Append(id int, counts [][]int64, gaps []Gap) error {
	if err := w.Memory.Append(id, counts, gaps); err != nil {
		return err
	}
	o := w.open[id]
	for o.Len()-o.written >= o.second {
		w.samples(id, o, o.written+o.second)
	}
	return w.failed
}

// samples writes those up to index to.
func (w *Writer) samples(id int, o *openSection, to int) {
	counts := make([][]int64, len(o.Counts))
	for c := range counts {
		counts[c] = o.Counts[c][o.written:to]
	}
	var gaps []Gap
	for o.gaps < len(o.Gaps) && o.Gaps[o.gaps].Before < to {
		g := o.Gaps[o.gaps]
		gaps = append(gaps, Gap{Before: g.Before - o.written, Lost: g.Lost})
		o.gaps++
	}
	w.block(blockData, id, appendData(nil, counts, gaps), o.hash)
	w.unsynced += float64(to-o.written) * o.SampleInterval
	o.written = to
	w.flushReadings(id, o)
	if w.unsynced >= syncEvery {
		w.sync()
	}
}

// sync asks for one; a request that is waiting already serves.
func (w *Writer) sync() {
	w.unsynced = 0
	select {
	case w.wanted <- struct{}{}:
	default:
	}
}

// Reading adds a bench reading; it is written with the section's next second.
func (w *Writer) Reading(id int, name string, unit quantity.Unit, at, value float64) error {
	if err := w.Memory.Reading(id, name, unit, at, value); err != nil {
		return err
	}
	o := w.open[id]
	i := slices.Index(o.known, name)
	fresh := i < 0
	if fresh {
		i = len(o.known)
		o.known = append(o.known, name)
	}
	o.readings = binary.AppendUvarint(o.readings, uint64(i))
	if fresh {
		for _, text := range []string{name, unit.String()} {
			o.readings = binary.AppendUvarint(o.readings, uint64(len(text)))
			o.readings = append(o.readings, text...)
		}
	}
	o.readings = binary.LittleEndian.AppendUint64(o.readings, math.Float64bits(at))
	o.readings = binary.LittleEndian.AppendUint64(o.readings, math.Float64bits(value))
	o.taken++
	return w.failed
}

func (w *Writer) flushReadings(id int, o *openSection) {
	if o.taken == 0 {
		return
	}
	w.block(blockReadings, id, append(binary.AppendUvarint(nil, uint64(o.taken)), o.readings...), o.hash)
	o.readings, o.taken = o.readings[:0], 0
}

// End closes a section.
func (w *Writer) End(id int, q Quality) error {
	if err := w.Memory.End(id, q); err != nil {
		return err
	}
	o := w.open[id]
	if o.Len() > o.written {
		w.samples(id, o, o.Len())
	}
	w.flushReadings(id, o)
	w.block(blockEnd, id, mustJSON(endJSON(q)), o.hash)
	o.Digest = hex.EncodeToString(o.hash.Sum(nil))
	w.sync()
	return w.failed
}

// Close writes the index, syncs and closes. Sections that are still open stay in the file as they are.
func (w *Writer) Close() (Seal, error) {
	var seal Seal
	index := []indexJSON{}
	for id, o := range w.open {
		if w.Memory.open[id] {
			continue
		}
		index = append(index, indexJSON{id, o.Name, o.Len(), o.Digest})
		seal.Sections = append(seal.Sections, SectionSeal{Name: o.Name, Labels: o.Labels, SHA256: o.Digest, Samples: o.Len()})
	}
	w.block(blockIndex, 0, mustJSON(index), nil)
	close(w.wanted)
	w.synced.Wait()
	err := errors.Join(w.failed, w.late, w.file.Sync(), w.file.Close())
	seal.SHA256, seal.Bytes = hex.EncodeToString(w.whole.Sum(nil)), w.bytes
	return seal, err
}
