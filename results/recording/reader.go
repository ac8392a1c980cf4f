package recording

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"hash"
	"os"
)

// File is a recording file that was read.
type File struct {
	Head       FileHead
	Recordings []*Recording
	SHA256     string
	Missing    string // what is wrong or cut off; "" for a whole file
}

// Open reads a file. A file that was cut off gives its whole blocks, and Missing says what is not there; a file that
// is none of ours is an error.
func Open(path string) (*File, error) {
	p, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	f, err := read(p)
	if err != nil {
		return nil, fmt.Errorf("recording %s: %w", path, err)
	}
	return f, nil
}

// read takes a file's bytes apart.
func read(p []byte) (*File, error) {
	if !bytes.HasPrefix(p, []byte(magic)) {
		return nil, errors.New("it does not begin as a recording file does")
	}
	sum := sha256.Sum256(p)
	f := &File{SHA256: hex.EncodeToString(sum[:])}
	var hashes []hash.Hash
	ended := map[int]bool{}
	indexed := false
	for rest := p[len(magic):]; len(rest) > 0; {
		b, err := nextBlock(rest)
		if err == nil && indexed {
			err = errors.New("a block after the index")
		}
		if err == nil {
			err = f.take(b, &hashes, ended)
		}
		if err != nil {
			f.Missing = fmt.Sprintf("from byte %d on: %v", len(p)-len(rest), err)
			break
		}
		indexed = indexed || b.kind == blockIndex
		rest = rest[len(b.whole):]
	}
	if f.Missing == "" && !indexed {
		f.Missing = "the index at the end: the file was cut off"
	}
	for i, r := range f.Recordings {
		r.Digest = hex.EncodeToString(hashes[i].Sum(nil))
		if !ended[i] {
			r.Quality = Quality{Reason: "the file was cut off during it"}
		}
	}
	return f, nil
}

// take adds a block to the file.
func (f *File) take(b block, hashes *[]hash.Hash, ended map[int]bool) error {
	if b.kind == blockFile {
		var head fileJSON
		err := json.Unmarshal(b.payload, &head)
		f.Head = FileHead(head)
		return err
	}
	if b.kind == blockIndex {
		return f.checkIndex(b.payload, *hashes)
	}
	if b.kind == blockSection {
		if b.section != len(f.Recordings) {
			return fmt.Errorf("section %d begins after section %d", b.section, len(f.Recordings)-1)
		}
		var head sectionJSON
		if err := json.Unmarshal(b.payload, &head); err != nil {
			return err
		}
		section, err := head.section()
		if err != nil {
			return err
		}
		f.Recordings = append(f.Recordings, &Recording{Section: section, Counts: make([][]int64, len(section.Channels))})
		*hashes = append(*hashes, sha256.New())
	}
	if b.section >= len(f.Recordings) {
		return fmt.Errorf("a block of section %d, which has not begun", b.section)
	}
	if ended[b.section] {
		return fmt.Errorf("a block of section %d, which has ended", b.section)
	}
	(*hashes)[b.section].Write(b.whole)
	r := f.Recordings[b.section]
	switch b.kind {
	case blockSection:
		return nil
	case blockData:
		return r.readData(b.payload)
	case blockReadings:
		return r.readReadings(b.payload)
	case blockEnd:
		var end endJSON
		if err := json.Unmarshal(b.payload, &end); err != nil {
			return err
		}
		r.Quality = Quality(end)
		ended[b.section] = true
		return nil
	}
	return fmt.Errorf("a block of unknown type %q", b.kind)
}

// checkIndex holds the index against what was read.
func (f *File) checkIndex(payload []byte, hashes []hash.Hash) error {
	var index []indexJSON
	if err := json.Unmarshal(payload, &index); err != nil {
		return err
	}
	for _, i := range index {
		if i.Section < 0 || i.Section >= len(f.Recordings) {
			return fmt.Errorf("the index names section %d, which is not there", i.Section)
		}
		r := f.Recordings[i.Section]
		if i.SHA256 != hex.EncodeToString(hashes[i.Section].Sum(nil)) || i.Samples != r.Len() || i.Name != r.Name {
			return fmt.Errorf("section %d (%s) is not as the index has it", i.Section, i.Name)
		}
	}
	return nil
}
