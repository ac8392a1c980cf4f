package recording

import (
	"fmt"
	"slices"

	"proofrate/limits/quantity"
)

// Sink takes one trial's recordings as they are measured. Several sections may be open at once.
type Sink interface {
	Begin(Section) (id int, err error)
	Append(id int, counts [][]int64, gaps []Gap) error // gaps are relative to the appended samples
	Reading(id int, name string, unit quantity.Unit, at, value float64) error
	End(id int, q Quality) error
	// Recordings are the sections that have ended, in the order of their beginning.
	Recordings() []*Recording
	Close() (Seal, error)
}

// Seal is what proves a closed file.
type Seal struct {
	SHA256   string
	Bytes    int64
	Sections []SectionSeal
}

// SectionSeal is what proves one recording.
type SectionSeal struct {
	Name    string
	Labels  Labels
	SHA256  string
	Samples int
}

// Memory is a sink that keeps recordings in memory only, for rehearsal and tests.
type Memory struct {
	all  []*Recording
	open []bool
}

// NewMemory makes an empty one.
func NewMemory() *Memory { return &Memory{} }

// Begin opens a section.
func (m *Memory) Begin(s Section) (int, error) {
	m.all = append(m.all, &Recording{Section: s, Counts: make([][]int64, len(s.Channels))})
	m.open = append(m.open, true)
	return len(m.all) - 1, nil
}

// Append adds samples to a section.
func (m *Memory) Append(id int, counts [][]int64, gaps []Gap) error {
	r, err := m.section(id)
	if err != nil {
		return err
	}
	return r.append(counts, gaps)
}

func (r *Recording) append(counts [][]int64, gaps []Gap) error {
	if len(counts) != len(r.Channels) {
		return fmt.Errorf("recording %s: %d channels of samples for %d channels", r.Name, len(counts), len(r.Channels))
	}
	before := r.Len()
	for c := range counts {
		r.Counts[c] = append(r.Counts[c], counts[c]...)
	}
	for _, g := range gaps {
		r.Gaps = append(r.Gaps, Gap{Before: before + g.Before, Lost: g.Lost})
	}
	return nil
}

// Reading adds a bench reading to a section.
func (m *Memory) Reading(id int, name string, unit quantity.Unit, at, value float64) error {
	r, err := m.section(id)
	if err != nil {
		return err
	}
	r.read(name, unit, at, value)
	return nil
}

func (r *Recording) read(name string, unit quantity.Unit, at, value float64) {
	i := slices.IndexFunc(r.Readings, func(s Series) bool { return s.Name == name })
	if i < 0 {
		i = len(r.Readings)
		r.Readings = append(r.Readings, Series{Name: name, Unit: unit})
	}
	s := &r.Readings[i]
	s.At, s.Values = append(s.At, at), append(s.Values, value)
}

// End closes a section.
func (m *Memory) End(id int, q Quality) error {
	r, err := m.section(id)
	if err != nil {
		return err
	}
	r.Quality = q
	m.open[id] = false
	return nil
}

func (m *Memory) section(id int) (*Recording, error) {
	if id < 0 || id >= len(m.all) || !m.open[id] {
		return nil, fmt.Errorf("recording %d is not open", id)
	}
	return m.all[id], nil
}

// Recordings are the sections that have ended.
func (m *Memory) Recordings() []*Recording {
	var ended []*Recording
	for i, r := range m.all {
		if !m.open[i] {
			ended = append(ended, r)
		}
	}
	return ended
}

// Close proves nothing: nothing was stored.
func (m *Memory) Close() (Seal, error) { return Seal{}, nil }
