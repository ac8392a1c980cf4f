package recording

import (
	"bytes"
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"proofrate/limits/quantity"
)

var rate = []Channel{{Name: "rate", Count: quantity.Of(0.05, quantity.MustUnit("deg/h"))}}

// filled writes two sections that overlap in time, in chunks of the given size, and gives the file's bytes.
func filled(t testing.TB, path string, chunk int) (Seal, *Writer) {
	t.Helper()
	w, err := Create(path, FileHead{"A", "OG-9", "100"})
	if err != nil {
		t.Fatal(err)
	}
	must := func(err error) {
		if err != nil {
			t.Fatal(err)
		}
	}
	long, err := w.Begin(Section{Name: "warm-up", Leg: "up", SincePowerOn: 0, Start: 0.5, SampleInterval: 0.01, First: 7, Channels: rate,
		Labels: Labels{{"temperature", quantity.Of(-40, quantity.MustUnit("degC")), 2}}})
	must(err)
	short, err := w.Begin(Section{Name: "rest", SincePowerOn: math.NaN(), Start: 1, SampleInterval: 0.01, Channels: append(rate, Channel{"angle", quantity.Of(1, quantity.MustUnit("arcsec"))})})
	must(err)
	random := rand.New(rand.NewPCG(1, 1))
	counts := make([]int64, 1050)
	for i := range counts {
		counts[i] = random.Int64N(1000) - 500
	}
	counts[3], counts[4] = math.MaxInt64, math.MinInt64
	for at := 0; at < len(counts); at += chunk {
		part := counts[at:min(at+chunk, len(counts))]
		var gaps []Gap
		if at <= 210 && 210 < at+len(part) {
			gaps = []Gap{{210 - at, 5}}
		}
		must(w.Append(long, [][]int64{part}, gaps))
		must(w.Append(short, [][]int64{part, part}, nil))
		if at <= 500 && 500 < at+len(part) { // readings come with time, not with chunks
			must(w.Reading(long, "table.rate", quantity.MustUnit("deg/s"), 5, -1e-5))
			must(w.Reading(long, "chamber.temperature", quantity.MustUnit("degC"), 5.1, 23.01))
		}
	}
	must(w.Reading(long, "table.rate", quantity.MustUnit("deg/s"), 6, 2e-5))
	must(w.End(short, Quality{Complete: true}))
	must(w.End(long, Quality{Lost: 5, Damaged: 1, Complete: false, Reason: "the door opened"}))
	seal, err := w.Close()
	must(err)
	return seal, w
}

// TestRoundTrip: what is read back is what was written, and the seal proves it.
func TestRoundTrip(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.rec")
	seal, w := filled(t, path, 100)
	f, err := Open(path)
	if err != nil || f.Missing != "" || f.SHA256 != seal.SHA256 || f.Head != (FileHead{"A", "OG-9", "100"}) {
		t.Fatalf("%+v, %v", f, err)
	}
	equal := cmp.Options{cmpopts.EquateNaNs(), cmpopts.EquateEmpty(), cmp.Comparer(func(a, b quantity.Unit) bool { return a == b })}
	if d := cmp.Diff(w.Recordings(), f.Recordings, equal); d != "" {
		t.Error(d)
	}
	if len(seal.Sections) != 2 || seal.Sections[0].SHA256 != f.Recordings[0].Digest || seal.Sections[1].Samples != 1050 {
		t.Errorf("%+v", seal)
	}
	if _, err := Create(path, FileHead{}); err == nil {
		t.Error("a file was overwritten")
	}
}

// TestChunksDoNotShow: how samples are handed over changes no byte.
func TestChunksDoNotShow(t *testing.T) {
	var first []byte
	for _, chunk := range []int{1050, 100, 50, 350} {
		path := filepath.Join(t.TempDir(), "a.rec")
		w, err := Create(path, FileHead{})
		if err != nil {
			t.Fatal(err)
		}
		id, _ := w.Begin(Section{Name: "x", SampleInterval: 0.01, Channels: rate})
		counts := make([]int64, 1050)
		for i := range counts {
			counts[i] = int64(i * i)
		}
		for at := 0; at < len(counts); at += chunk {
			if err := w.Append(id, [][]int64{counts[at:min(at+chunk, len(counts))]}, nil); err != nil {
				t.Fatal(err)
			}
		}
		w.End(id, Quality{Complete: true})
		if _, err := w.Close(); err != nil {
			t.Fatal(err)
		}
		text, _ := os.ReadFile(path)
		if first == nil {
			first = text
		} else if !bytes.Equal(first, text) {
			t.Errorf("chunks of %d give another file", chunk)
		}
	}
}

// TestCutAnywhere: a file cut at any byte opens with its whole blocks and says what is missing.
func TestCutAnywhere(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.rec")
	_, w := filled(t, path, 100)
	whole, _ := os.ReadFile(path)
	before := 0
	for n := len(magic); n < len(whole); n += 7 {
		f, err := read(whole[:n])
		if err != nil || f.Missing == "" {
			t.Fatalf("cut at %d: %+v, %v", n, f, err)
		}
		samples := 0
		for i, r := range f.Recordings {
			samples += r.Len()
			for at, c := range r.Counts[0] {
				if c != w.Recordings()[i].Counts[0][at] {
					t.Fatalf("cut at %d: sample %d is %d", n, at, c)
				}
			}
		}
		if samples < before {
			t.Fatalf("cut at %d: %d samples, %d before", n, samples, before)
		}
		before = samples
	}
	if before == 0 {
		t.Error("no samples at all")
	}
}

// TestChangedByte: any changed byte is found.
func TestChangedByte(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.rec")
	seal, _ := filled(t, path, 100)
	whole, _ := os.ReadFile(path)
	for i := range whole {
		broken := bytes.Clone(whole)
		broken[i] ^= 0x10
		f, err := read(broken)
		if err == nil && f.Missing == "" {
			t.Fatalf("byte %d of %d: nothing is missing", i, len(whole))
		}
		if err == nil && f.SHA256 == seal.SHA256 {
			t.Fatalf("byte %d: the digest is the same", i)
		}
	}
}

// TestFullDisk: the first failure is told and stays.
func TestFullDisk(t *testing.T) {
	full, err := os.OpenFile("/dev/full", os.O_WRONLY, 0)
	if err != nil {
		t.Logf("this system has no /dev/full: %v", err)
		return
	}
	w, err := Create(filepath.Join(t.TempDir(), "a.rec"), FileHead{})
	if err != nil {
		t.Fatal(err)
	}
	w.file.Close()
	w.file = full
	id, err := w.Begin(Section{Name: "x", SampleInterval: 0.01, Channels: rate})
	if err == nil || !strings.Contains(err.Error(), "no space left") || !strings.Contains(err.Error(), "is kept") {
		t.Fatalf("%v", err)
	}
	if again := w.Append(id, [][]int64{make([]int64, 200)}, nil); again == nil || again.Error() != err.Error() {
		t.Errorf("%v", again)
	}
	if _, err := w.Close(); err == nil {
		t.Error("closed as if all were well")
	}
}

// TestCSV: numbers come in as they are written, sums over them are exact.
func TestCSV(t *testing.T) {
	r, err := ReadCSV("x", strings.NewReader("time;rate\n0;1.25\n1;-0.5\n\n"), CSVOptions{Unit: quantity.MustUnit("deg/s"), SampleInterval: 1})
	if err != nil || fmt.Sprint(r.Counts[0]) != "[125 -50]" || r.Channels[0].Count.Number != 0.01 {
		t.Errorf("%+v, %v", r, err)
	}
	var lines []string
	want := new(big.Rat)
	random := rand.New(rand.NewPCG(2, 2))
	for range 1000 {
		text := fmt.Sprintf("%.*f", random.IntN(9), random.NormFloat64()*100)
		x, _ := new(big.Rat).SetString(text)
		want.Add(want, x)
		lines = append(lines, text)
	}
	if r, err = ReadCSV("x", strings.NewReader(strings.Join(lines, "\n")), CSVOptions{SampleInterval: 1}); err != nil {
		t.Fatal(err)
	}
	sum := int64(0)
	for _, c := range r.Counts[0] {
		sum += c
	}
	unit, _ := new(big.Rat).SetString("1e-8")
	if got := new(big.Rat).Mul(new(big.Rat).SetInt64(sum), unit); got.Cmp(want) != 0 {
		t.Errorf("the sum is %s, exact is %s", got.FloatString(9), want.FloatString(9))
	}
	for text, part := range map[string]string{
		"":                  "no sample",
		"1\n":               "one sample only",
		"1\n2,3\n":          "is not a number",
		"a,b\n1,2\n":        "none is headed",
		"rate,b\n1,2\n3\n":  "1 columns, the lines above have 2",
		"1\n\n2\n":          "x:2: a value is missing",
		"1\nNaN\n":          "is no measured value",
		"1\n-inf\n":         "is no measured value",
		"1\n\x00\x01\n":     "binary",
		"1\n1e999\n":        "exponent",
		"1\n0x10\n":         "is not a number",
		"1\n1.2.3\n":        "is not a number",
		"rate,b\n1,2\n,3\n": "x:3: a value is missing",
		"1\n--2\n":          "is not a number",
	} {
		if _, err := ReadCSV("x", strings.NewReader(text), CSVOptions{SampleInterval: 1}); err == nil || !strings.Contains(err.Error(), part) {
			t.Errorf("%q: %v, expected %q", text, err, part)
		}
	}
}

// FuzzRead: whatever the bytes, no panic.
func FuzzRead(f *testing.F) {
	path := filepath.Join(f.TempDir(), "a.rec")
	filled(f, path, 500)
	whole, err := os.ReadFile(path)
	if err != nil {
		f.Fatal(err)
	}
	f.Add(whole)
	f.Add(whole[:200])
	f.Add([]byte(magic))
	f.Fuzz(func(t *testing.T, p []byte) { read(p) })
}

func BenchmarkAppend(b *testing.B) {
	w, err := Create(filepath.Join(b.TempDir(), "a.rec"), FileHead{})
	if err != nil {
		b.Fatal(err)
	}
	defer w.Close()
	id, _ := w.Begin(Section{Name: "x", SampleInterval: 0.01, Channels: rate})
	counts := [][]int64{make([]int64, 100)}
	for i := range counts[0] {
		counts[0][i] = int64(i*7919) % 61
	}
	for b.Loop() {
		if err := w.Append(id, counts, nil); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(100*float64(b.N)/b.Elapsed().Seconds(), "samples/s")
}
