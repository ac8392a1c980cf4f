package bench

import (
	"embed"
	"io/fs"
	"path"
	"strings"
)

//go:embed shipped/*.yaml
var shipped embed.FS

// Default is the name of the shipped bench that stands in where none is named.
const Default = "virtual-bench"

// Shipped gives the text of a shipped bench file.
func Shipped(name string) ([]byte, bool) {
	text, err := shipped.ReadFile("shipped/" + name + ".yaml")
	return text, err == nil
}

// ShippedNames lists the shipped benches.
func ShippedNames() []string {
	names, err := fs.Glob(shipped, "shipped/*.yaml")
	if err != nil {
		panic(err) // a pattern of ours
	}
	for i, name := range names {
		names[i] = strings.TrimSuffix(path.Base(name), ".yaml")
	}
	return names
}
