package profile

import (
	"context"
	"crypto/sha256"
	"embed"
	"encoding/hex"
	"path"
	"strings"
	"sync"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// Profile is the driver of one instrument model. What stands in its fields is known without I/O.
type Profile struct {
	Name, Title, Family string
	Roles               []string
	Text                []byte
	Digest              string // "sha256:..." of Text
	Serial              link.SerialSettings
	Timeout             time.Duration // for one answer
	Tries               int           // how often a request is sent

	Readings                  map[string][]string // by role; not a meter's, which carries its instrument's name
	MeterUnit                 quantity.Unit       // of a meter's value
	CanPosition, CanOscillate bool
	Limits                    map[string]Range // of the values of actions, where the profile states them
	SupplyChannels            int              // 0: one, without a number
	Channels                  []instruments.Channel
	SampleRate                quantity.Value
	FrameCounter              bool

	// Trace is called with every exchange of the drivers that are made after it is set.
	Trace func(Exchange)

	speech speech // nil of frames
	frame  *frame // nil else

	mu    sync.Mutex
	lines map[link.Link]*line // several drivers may share a link
}

// Range is from the least to the greatest value.
type Range struct{ Low, High quantity.Value }

// speech is a family that speaks in requests: lines or registers.
type speech interface {
	// act carries out an action; nothing is sent if a value does not fit.
	act(ctx context.Context, l *line, action string, v values, channel int) error
	// sends says whether an action sends one of its values.
	sends(action, value string) bool
	// ask makes the job of a reading; the value stands in *into when the job is done without an error.
	ask(l *line, reading string, channel int, into *quantity.Value) *job
	identify(ctx context.Context, l *line) (instruments.Identity, error)
	// rest is how long a line with such a serial port is silent between an answer and the next request.
	rest(baud int) time.Duration
	can(action string) bool
	reads(reading string) bool
}

// Load reads a profile and reports every mistake with its place. The profile is nil if there is one.
func Load(name string, text []byte) (*Profile, *source.File, source.List) {
	file, root, problems := document.Read(name, text)
	if root == nil {
		return nil, file, problems
	}
	sum := sha256.Sum256(text)
	r := &reader{file: file, problems: &problems, root: root, m: document.Decode(root, &profileTable, &problems),
		p: &Profile{Text: text, Digest: "sha256:" + hex.EncodeToString(sum[:]),
			Readings: map[string][]string{}, lines: map[link.Link]*line{}}}
	r.read()
	if len(problems) > 0 {
		problems.Sort()
		return nil, file, problems
	}
	return r.p, file, nil
}

//go:embed shipped/*.yaml
var shipped embed.FS

// Shipped gives a shipped profile by its name.
func Shipped(name string) ([]byte, bool) {
	text, err := shipped.ReadFile(path.Join("shipped", name+".yaml"))
	return text, err == nil
}

// ShippedNames are the names of the shipped profiles.
func ShippedNames() []string {
	entries, err := shipped.ReadDir("shipped")
	if err != nil {
		panic("profile: the embedded folder is missing: " + err.Error())
	}
	names := make([]string, len(entries))
	for i, e := range entries {
		names[i] = strings.TrimSuffix(e.Name(), ".yaml")
	}
	return names
}
