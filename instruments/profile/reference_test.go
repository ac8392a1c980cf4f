package profile

import (
	"encoding/csv"
	"encoding/hex"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// reference reads a table of published values: a row is a map from column to text.
func reference(t testing.TB, name string) []map[string]string {
	t.Helper()
	f, err := os.Open(filepath.Join("..", "..", "testdata", "reference", "protocol", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(f)
	r.Comment = '#'
	r.FieldsPerRecord = -1
	records, err := r.ReadAll()
	if err != nil || len(records) < 2 {
		t.Fatalf("%s: %d rows, %v", name, len(records), err)
	}
	var rows []map[string]string
	for _, record := range records[1:] {
		row := map[string]string{}
		for i, text := range record {
			row[records[0][i]] = text
		}
		rows = append(rows, row)
	}
	return rows
}

// octets reads "01 03 00 6B".
func octets(t testing.TB, text string) []byte {
	t.Helper()
	p, err := hex.DecodeString(strings.ReplaceAll(text, " ", ""))
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func hexNumber(t testing.TB, text string) uint32 {
	t.Helper()
	x, err := strconv.ParseUint(text, 0, 32)
	if err != nil {
		t.Fatal(err)
	}
	return uint32(x)
}

// TestChecksumsArePublished holds each checksum by name against its published check value.
func TestChecksumsArePublished(t *testing.T) {
	checked := map[string]bool{}
	check := func(name string, input []byte, want uint32) {
		if got := checksums[name].of(input); got != want {
			t.Errorf("%s of %q is %#x, published %#x", name, input, got, want)
		}
		checked[name] = true
	}
	names := map[string]string{"CRC-16/IBM-3740": "CRC-16/CCITT-FALSE"}
	for _, row := range reference(t, "crc_catalogue.csv") {
		name := row["name"]
		if ours := names[name]; ours != "" {
			name = ours
		}
		if _, known := checksums[name]; known {
			check(name, []byte("123456789"), hexNumber(t, row["check"]))
			if got := strconv.Itoa(8 * checksums[name].width); got != row["width"] {
				t.Errorf("%s is %s bits wide, published %s", name, got, row["width"])
			}
		}
	}
	names = map[string]string{"Fletcher-16 mod 255": "Fletcher-16", "NMEA 0183 XOR (replace ; by comma)": "xor8", "XOR-8": "xor8", "SUM-8": "sum8"}
	for _, row := range reference(t, "checksums.csv") {
		if name := names[row["algorithm"]]; name != "" {
			text := strings.TrimPrefix(row["input"], "ascii:")
			if strings.HasPrefix(row["algorithm"], "NMEA") {
				text = strings.ReplaceAll(text, ";", ",")
			}
			check(name, []byte(text), hexNumber(t, row["computed"]))
		}
	}
	for _, name := range checksumNames() {
		if !checked[name] {
			t.Errorf("%s was held against no published value", name)
		}
	}
}

// TestFletcherLongFrames: taking the remainder once gives what taking it at every byte does, on the longest frame of
// the greatest bytes.
func TestFletcherLongFrames(t *testing.T) {
	p := make([]byte, frameMost)
	var a, b uint32
	for i := range p {
		p[i] = 0xff
		a = (a + 0xff) % 255
		b = (b + a) % 255
	}
	p[17] = 3
	a, b = 0, 0
	for _, c := range p {
		a = (a + uint32(c)) % 255
		b = (b + a) % 255
	}
	if got := fletcher16(p); got != b<<8|a {
		t.Errorf("got %#x, want %#x", got, b<<8|a)
	}
}

// TestNumbers: the answers that IEEE Std 488.2 calls NR1, NR2 and NR3, and SCPI's numbers that are none.
func TestNumbers(t *testing.T) {
	seen := 0
	for _, row := range reference(t, "ieee488_2_formats.csv") {
		switch {
		case !strings.HasPrefix(row["kind"], "NR"):
			continue
		}
		seen++
		want, err := strconv.ParseFloat(row["parsed_or_note"], 64)
		if err != nil {
			t.Fatal(err)
		}
		got, ok := parseNumber(row["example"])
		none := strings.Contains(row["rule"], "SCPI")
		if ok == none || ok && got != want {
			t.Errorf("%s (%s) gave %v, %v", row["example"], row["rule"], got, ok)
		}
	}
	if seen < 8 {
		t.Errorf("only %d examples", seen)
	}
	for _, text := range []string{"", " ", "inf", "NaN", "0x10", "1_000", "1e999", "--1", "1,5", "12 V", "+", "9.91E+37"} {
		if got, ok := parseNumber(text); ok {
			t.Errorf("%q was read as %v", text, got)
		}
	}
	if got, ok := parseNumber(" +1.5 "); !ok || got != 1.5 {
		t.Errorf("spaces around a number: %v, %v", got, ok)
	}
}
