package recording

import (
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"hash/crc32"
	"math"

	"proofrate/limits/quantity"
)

// The file's layout; FORMAT.md says it in words.
const (
	magic     = "PRFREC1\n"
	blockHead = 9
	blockTail = 4
	blockMost = 64 << 20
)

const (
	blockFile     = 'H'
	blockSection  = 'S'
	blockData     = 'D'
	blockReadings = 'R'
	blockEnd      = 'E'
	blockIndex    = 'I'
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// appendBlock frames a payload.
func appendBlock(to []byte, kind byte, section int, payload []byte) []byte {
	start := len(to)
	to = append(to, kind)
	to = binary.LittleEndian.AppendUint32(to, uint32(section))
	to = binary.LittleEndian.AppendUint32(to, uint32(len(payload)))
	to = append(to, payload...)
	return binary.LittleEndian.AppendUint32(to, crc32.Checksum(to[start:], castagnoli))
}

// block is one read back.
type block struct {
	kind    byte
	section int
	payload []byte
	whole   []byte
}

// errCut says that the bytes end within a block.
var errCut = errors.New("the file ends within a block")

// nextBlock takes a block off p.
func nextBlock(p []byte) (block, error) {
	if len(p) < blockHead {
		return block{}, errCut
	}
	length := int(binary.LittleEndian.Uint32(p[5:]))
	if length > blockMost {
		return block{}, fmt.Errorf("a block of %d bytes; at most %d are written", length, blockMost)
	}
	total := blockHead + length + blockTail
	if len(p) < total {
		return block{}, errCut
	}
	if crc32.Checksum(p[:total-blockTail], castagnoli) != binary.LittleEndian.Uint32(p[total-blockTail:]) {
		return block{}, errors.New("a block's checksum is wrong")
	}
	return block{p[0], int(binary.LittleEndian.Uint32(p[1:])), p[blockHead : total-blockTail], p[:total]}, nil
}

// JSON forms of the heads.
type (
	fileJSON struct {
		Slot   string `json:"slot"`
		Part   string `json:"part"`
		Serial string `json:"serial"`
	}
	sectionJSON struct {
		Name         string        `json:"name"`
		Step         string        `json:"step"`
		Labels       []LabelJSON   `json:"labels"`
		Leg          string        `json:"leg"`
		SincePowerOn *float64      `json:"since_power_on"`
		Start        float64       `json:"start"`
		Channels     []channelJSON `json:"channels"`
		Interval     float64       `json:"interval"`
		First        uint64        `json:"first"`
	}
	channelJSON struct {
		Name  string `json:"name"`
		Count string `json:"count"`
	}
	endJSON struct {
		Lost     uint64 `json:"lost"`
		Damaged  uint64 `json:"damaged"`
		Complete bool   `json:"complete"`
		Reason   string `json:"reason"`
	}
	indexJSON struct {
		Section int    `json:"section"`
		Name    string `json:"name"`
		Samples int    `json:"samples"`
		SHA256  string `json:"sha256"`
	}
)

// LabelJSON is a label as evidence has it.
type LabelJSON struct {
	Name  string  `json:"name"`
	Value float64 `json:"value"`
	Unit  string  `json:"unit"`
	Visit int     `json:"visit"`
}

// JSON gives labels the form that evidence has.
func (l Labels) JSON() []LabelJSON {
	list := make([]LabelJSON, len(l))
	for i, label := range l {
		list[i] = LabelJSON{label.Name, label.Value.Number, label.Value.Unit.String(), label.Visit}
	}
	return list
}

// LabelsFrom reads labels back.
func LabelsFrom(list []LabelJSON) (Labels, error) {
	labels := make(Labels, len(list))
	for i, l := range list {
		unit, err := quantity.ParseUnit(l.Unit)
		if err != nil {
			return nil, fmt.Errorf("label %s: %w", l.Name, err)
		}
		labels[i] = Label{l.Name, quantity.Of(l.Value, unit), l.Visit}
	}
	return labels, nil
}

func mustJSON(v any) []byte {
	p, err := json.Marshal(v)
	if err != nil {
		panic("recording: " + err.Error()) // plain structs of ours, finite numbers
	}
	return p
}

func (s Section) json() sectionJSON {
	j := sectionJSON{Name: s.Name, Step: s.Step, Labels: s.Labels.JSON(), Leg: s.Leg, Start: s.Start, Interval: s.SampleInterval, First: s.First}
	if !math.IsNaN(s.SincePowerOn) {
		j.SincePowerOn = &s.SincePowerOn
	}
	for _, c := range s.Channels {
		j.Channels = append(j.Channels, channelJSON{c.Name, c.Count.String()})
	}
	return j
}

func (j sectionJSON) section() (Section, error) {
	s := Section{Name: j.Name, Step: j.Step, Leg: j.Leg, Start: j.Start, SampleInterval: j.Interval, First: j.First, SincePowerOn: math.NaN()}
	if j.SincePowerOn != nil {
		s.SincePowerOn = *j.SincePowerOn
	}
	var err error
	if s.Labels, err = LabelsFrom(j.Labels); err != nil {
		return s, err
	}
	for _, c := range j.Channels {
		count, err := quantity.Parse(c.Count)
		if err != nil {
			return s, err
		}
		s.Channels = append(s.Channels, Channel{c.Name, count})
	}
	return s, nil
}

// appendData encodes samples: signed differences as varints.
func appendData(to []byte, counts [][]int64, gaps []Gap) []byte {
	to = binary.AppendUvarint(to, uint64(len(gaps)))
	for _, g := range gaps {
		to = binary.AppendUvarint(to, uint64(g.Before))
		to = binary.AppendUvarint(to, g.Lost)
	}
	n := 0
	if len(counts) > 0 {
		n = len(counts[0])
	}
	to = binary.AppendUvarint(to, uint64(n))
	for _, channel := range counts {
		before := int64(0)
		for _, c := range channel {
			to = binary.AppendVarint(to, c-before)
			before = c
		}
	}
	return to
}

// cursor reads varints and bytes; a short payload sets bad.
type cursor struct {
	p   []byte
	bad bool
}

func (c *cursor) unsigned() uint64 {
	x, n := binary.Uvarint(c.p)
	if n <= 0 {
		c.bad = true
		return 0
	}
	c.p = c.p[n:]
	return x
}

func (c *cursor) signed() int64 {
	x, n := binary.Varint(c.p)
	if n <= 0 {
		c.bad = true
		return 0
	}
	c.p = c.p[n:]
	return x
}

func (c *cursor) bytes(n uint64) []byte {
	if n > uint64(len(c.p)) {
		c.bad = true
		return nil
	}
	p := c.p[:n]
	c.p = c.p[n:]
	return p
}

func (c *cursor) float() float64 {
	p := c.bytes(8)
	if c.bad {
		return 0
	}
	return math.Float64frombits(binary.LittleEndian.Uint64(p))
}

// readData decodes a data block into a recording.
func (r *Recording) readData(payload []byte) error {
	c := cursor{p: payload}
	before := r.Len()
	for range c.unsigned() {
		g := Gap{Before: before + int(c.unsigned()), Lost: c.unsigned()}
		if c.bad {
			break
		}
		r.Gaps = append(r.Gaps, g)
	}
	n := c.unsigned()
	if n > uint64(len(payload)) {
		c.bad = true
	}
	for i := range r.Counts {
		x := int64(0)
		for range n {
			x += c.signed()
			if c.bad {
				return errors.New("a data block is shorter than it says")
			}
			r.Counts[i] = append(r.Counts[i], x)
		}
	}
	if c.bad || len(c.p) > 0 {
		return errors.New("a data block is not as long as it says")
	}
	return nil
}

// readReadings decodes a block of bench readings.
func (r *Recording) readReadings(payload []byte) error {
	c := cursor{p: payload}
	for range c.unsigned() {
		i := c.unsigned()
		if i == uint64(len(r.Readings)) {
			name := string(c.bytes(c.unsigned()))
			unit, err := quantity.ParseUnit(string(c.bytes(c.unsigned())))
			if err != nil {
				return err
			}
			r.Readings = append(r.Readings, Series{Name: name, Unit: unit})
		}
		at, value := c.float(), c.float()
		if c.bad || i >= uint64(len(r.Readings)) {
			return errors.New("a block of readings is not as long as it says")
		}
		s := &r.Readings[i]
		s.At, s.Values = append(s.At, at), append(s.Values, value)
	}
	return nil
}
