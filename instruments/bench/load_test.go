package bench

import (
	"bytes"
	"errors"
	"flag"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/rogpeppe/go-internal/txtar"

	"proofrate/instruments"
	"proofrate/instruments/profile"
	"proofrate/limits/document"
)

var update = flag.Bool("update", false, "write the golden files anew")

func base(t testing.TB) string {
	t.Helper()
	text, err := os.ReadFile("testdata/base.yaml")
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// rendered loads a bench file and prints what is wrong, as a user sees it.
func rendered(text string) string {
	loaded, file, wrong := Load("base.yaml", []byte(text), func(path string) ([]byte, error) {
		text, err := os.ReadFile(filepath.Join("testdata", path))
		if err != nil {
			err = fs.ErrNotExist // whatever this system calls it
		}
		return text, err
	})
	var b bytes.Buffer
	wrong.Render(&b, file)
	if (loaded == nil) != (len(wrong) > 0) {
		b.WriteString("loaded although it is wrong, or neither\n")
	}
	return b.String()
}

// TestBrokenBenches takes a sound bench file, breaks it in one place and compares the whole of the diagnostics.
func TestBrokenBenches(t *testing.T) {
	files, err := filepath.Glob("testdata/bad/*.txtar")
	if err != nil || len(files) < 20 {
		t.Fatalf("%d broken bench files, %v", len(files), err)
	}
	for _, name := range files {
		t.Run(strings.TrimSuffix(filepath.Base(name), ".txtar"), func(t *testing.T) {
			archive, err := txtar.ParseFile(name)
			if err != nil {
				t.Fatal(err)
			}
			part := map[string]string{}
			for _, f := range archive.Files {
				part[f.Name] = string(f.Data)
			}
			take, put := strings.TrimSuffix(part["take"], "\n"), strings.TrimSuffix(part["put"], "\n")
			text := base(t)
			if strings.Count(text, take) != 1 {
				t.Fatalf("the text to take stands %d times in base.yaml", strings.Count(text, take))
			}
			got := rendered(strings.Replace(text, take, put, 1))
			if got == "" {
				t.Fatal("nothing was found wrong")
			}
			if *update {
				archive.Files[len(archive.Files)-1].Data = []byte(got)
				if err := os.WriteFile(name, txtar.Format(archive), 0o644); err != nil {
					t.Fatal(err)
				}
			}
			if diff := cmp.Diff(got, part["want"]); diff != "" && !*update {
				t.Errorf("got (-), want (+):\n%s", diff)
			}
		})
	}
}

// TestAllMistakesInOnePass breaks a file in many places at once.
func TestAllMistakesInOnePass(t *testing.T) {
	text := base(t)
	for _, change := range [][2]string{
		{"latitude: 47.66 deg", "latitude: 147.66 deg"}, {"  axis: up", "  axis: upp"}, {"  creep: ", "  creap: "},
		{"U: 20 ppm", "U: 20 mV"}, {"channel: 2", "channel: 5"}, {"population: optical, overrides", "population: optikal, overrides"},
	} {
		text = strings.Replace(text, change[0], change[1], 1)
	}
	_, _, wrong := Load("base.yaml", []byte(text), os.ReadFile)
	codes := map[string]bool{}
	for _, d := range wrong {
		codes[d.Code] = true
	}
	for _, code := range []string{"wrong-latitude", "wrong-axis", "unknown-key", "missing-key", "wrong-unit", "wrong-channel", "unknown-population"} {
		if !codes[code] {
			t.Errorf("%s was not found in one pass; found %v", code, codes)
		}
	}
}

func TestBaseDescription(t *testing.T) {
	loaded, _, wrong := Load("base.yaml", []byte(base(t)), os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	d := loaded.Description
	if d.Station != "test-hall" || d.Name != "small" || !d.Virtual || d.Pace != 1 || !strings.HasPrefix(d.Digest, "sha256:") {
		t.Errorf("%q %q virtual %v pace %v %q", d.Station, d.Name, d.Virtual, d.Pace, d.Digest)
	}
	if d.Table.Axis != (instruments.Vector{0, 0, 1}) || !d.Table.CanPosition || !d.Table.CanOscillate {
		t.Errorf("table %+v", d.Table)
	}
	if len(d.Slots) != 2 || d.Slots[0].Sense != 1 || d.Slots[1].Sense != -1 || d.Slots[1].SupplyChannel != 2 {
		t.Fatalf("slots %+v", d.Slots)
	}
	s := d.Slots[1]
	if len(s.Channels) != 1 || s.Channels[0].Name != "rate" || s.SampleRate.SI() != 100 || !s.FrameCounter {
		t.Errorf("slot B: channels %v at %v, counter %v", s.Channels, s.SampleRate, s.FrameCounter)
	}
	for _, reading := range []string{"supply.current", "supply.voltage", "gyro.temperature"} {
		if !strings.Contains(strings.Join(s.Readings, " "), reading) {
			t.Errorf("slot B cannot read %s: %v", reading, s.Readings)
		}
	}
	c := d.Instruments[0].Calibrations[0]
	if c.Reading != "table.rate" || math.Abs(c.Correction.SI()-3e-6) > 1e-18 || math.Abs(c.U.SI()-20e-6) > 1e-18 || c.K != 2 {
		t.Errorf("calibration %+v", c)
	}
}

func TestAxes(t *testing.T) {
	for text, want := range map[string]instruments.Vector{
		"down": {0, 0, -1}, "east": {1, 0, 0}, "0 0.6 0.8": {0, 0.6, 0.8}, "0 3 -4": {0, 0.6, -0.8},
	} {
		loaded, _, wrong := Load("base.yaml", []byte(strings.Replace(base(t), "axis: up", "axis: "+text, 1)), os.ReadFile)
		if err := wrong.Err(); err != nil {
			t.Error(err)
			continue
		}
		for i, got := range loaded.Description.Table.Axis {
			if math.Abs(got-want[i]) > 1e-15 { // one division
				t.Errorf("%s: %v, want %v", text, loaded.Description.Table.Axis, want)
			}
		}
	}
}

// TestOddInput gives what is no bench file at all.
func TestOddInput(t *testing.T) {
	for name, text := range map[string]string{
		"empty": "", "binary": "\x00\x01\x02", "text": "hello", "list": "- 1\n- 2\n", "brackets": strings.Repeat("[", 1<<20),
		"aliases": "a: &a [x, x]\nb: &b [*a, *a]\nbench: *b\n", "unset": "bench:\nstation:\nsite:\ninstruments:\nslots:\n",
		"wrong forms": "bench: [a]\nstation: {a: b}\nsite: 3\ninstruments: [1]\ntable: x\nchamber: 1\nslots: 2\nvirtual: 3\n",
	} {
		loaded, _, wrong := Load(name, []byte(text), os.ReadFile)
		if loaded != nil || len(wrong) == 0 {
			t.Errorf("%s: loaded", name)
		}
	}
}

func TestProfileOfAFileIsAskedForAsItIsNamed(t *testing.T) {
	text := strings.Replace(base(t), "profile: supply-scpi", "profile: parts/supply.yaml", 1)
	var asked []string
	_, _, wrong := Load("station/bench.yaml", []byte(text), func(path string) ([]byte, error) {
		asked = append(asked, path)
		return nil, fs.ErrNotExist
	})
	if len(asked) != 1 || asked[0] != "parts/supply.yaml" || len(wrong) != 1 {
		t.Errorf("asked for %v; %v", asked, wrong.Err())
	}
}

// TestSerialLinkNeedsSettings: a profile for TCP alone does not say how a serial port is set.
func TestSerialLinkNeedsSettings(t *testing.T) {
	text := base(t)
	text = strings.ReplaceAll(text[:strings.Index(text, "virtual:\n  ambient")], "link: virtual:", "link: serial:/dev/tty-")
	text = strings.Replace(text, "profile: supply-scpi", "profile: ./supply.yaml", 1)
	supply, _ := profile.Shipped("supply-scpi")
	before, after, found := strings.Cut(string(supply), "\nserial:")
	_, after, _ = strings.Cut(after, "\n")
	if !found {
		t.Fatal("the shipped supply has no serial settings to take out")
	}
	_, _, wrong := Load("base.yaml", []byte(text), func(string) ([]byte, error) { return []byte(before + "\n" + after), nil })
	if len(wrong) != 1 || wrong[0].Code != "no-serial-settings" {
		t.Errorf("found %v", wrong)
	}
}

func TestShippedBenchesAreSound(t *testing.T) {
	names := ShippedNames()
	if len(names) != 3 {
		t.Errorf("shipped: %v", names)
	}
	for _, name := range names {
		text, ok := Shipped(name)
		if !ok {
			t.Fatalf("%s is not there", name)
		}
		loaded, file, wrong := Load(name, text, func(string) ([]byte, error) { return nil, errors.New("a shipped bench uses no files") })
		if len(wrong) > 0 {
			var b bytes.Buffer
			wrong.Render(&b, file)
			t.Errorf("%s:\n%s", name, b.String())
			continue
		}
		if !loaded.Description.Virtual || len(loaded.Description.Slots) != 4 {
			t.Errorf("%s: virtual %v, %d slots", name, loaded.Description.Virtual, len(loaded.Description.Slots))
		}
		for _, i := range loaded.Description.Instruments {
			for _, c := range i.Calibrations {
				if !strings.Contains(c.Certificate, "invented") {
					t.Errorf("%s: certificate %q of %s does not say that it is invented", name, c.Certificate, i.Name)
				}
			}
		}
	}
	if _, ok := Shipped(Default); !ok {
		t.Errorf("the default bench %s is not shipped", Default)
	}
}

// FuzzLoad: whatever the text, every diagnostic lies inside the file and no sound bench comes of a wrong file.
func FuzzLoad(f *testing.F) {
	f.Add(base(f))
	f.Fuzz(func(t *testing.T, text string) {
		if len(text) > 64<<10 {
			t.Skip()
		}
		_, file, wrong := Load("fuzz.yaml", []byte(text), func(string) ([]byte, error) { return nil, fs.ErrNotExist })
		for _, d := range wrong {
			if d.Span.File == "fuzz.yaml" && (d.Span.Start < 0 || d.Span.End < d.Span.Start || d.Span.End > len(file.Text)) {
				t.Fatalf("%s: %+v of %d bytes", d.Code, d.Span, len(file.Text))
			}
		}
	})
}

// TestReadme: the README's reference is the tables themselves, and its example loads.
func TestReadme(t *testing.T) {
	const mark = "## Keys\n\n"
	text, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	head, reference, _ := strings.Cut(string(text), mark)
	if *update {
		reference = document.Reference(Table)
		if err := os.WriteFile("README.md", []byte(head+mark+reference), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	if diff := cmp.Diff(document.Reference(Table), reference); diff != "" {
		t.Errorf("the tables (-) and README.md (+):\n%s", diff)
	}
	for _, k := range Table.Keys {
		if k.Doc == "" {
			t.Errorf("%s has no line of doc", k.Name)
		}
	}
	_, example, _ := strings.Cut(head, "```yaml\n")
	example, _, _ = strings.Cut(example, "```")
	if loaded, file, wrong := Load("README.md", []byte(example), os.ReadFile); loaded == nil {
		var b bytes.Buffer
		wrong.Render(&b, file)
		t.Errorf("the example:\n%s", b.String())
	}
}
