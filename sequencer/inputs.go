package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"github.com/spf13/cobra"

	"proofrate/instruments/bench"
	"proofrate/limits/source"
	"proofrate/procedures"
)

// document reads a document by the name of a shipped one or by its file.
func document(kind, name string, shipped func(string) ([]byte, bool), names []string) ([]byte, error) {
	if text, ok := shipped(name); ok {
		return text, nil
	}
	info, err := os.Stat(name)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		help := ""
		if near, ok := source.Suggest(name, names); ok {
			help = fmt.Sprintf("; did you mean %q?", near)
		}
		return nil, fmt.Errorf("%s %q: neither a file nor a shipped one%s (shipped: %s)", kind, name, help, strings.Join(names, ", "))
	case err != nil:
		return nil, fmt.Errorf("%s %q: %w", kind, name, err)
	case info.IsDir():
		return nil, fmt.Errorf("%s %q is a folder; give the file in it", kind, name)
	case info.Size() > 1<<20:
		return nil, fmt.Errorf("%s %q has %d bytes; a document has at most 1 MiB", kind, name, info.Size())
	}
	return os.ReadFile(name)
}

func loadProcedure(name string) (*procedures.Procedure, *source.File, source.List, error) {
	text, err := document("procedure", name, procedures.Shipped, procedures.ShippedNames())
	if err != nil {
		return nil, nil, nil, err
	}
	procedure, file, problems := procedures.Load(name, text)
	return procedure, file, problems, nil
}

// defaultBench is the shipped bench that a run uses when none is named.
const defaultBench = "virtual-bench"

func loadBench(name string) (*bench.Loaded, *source.File, source.List, error) {
	text, err := document("bench", name, bench.Shipped, bench.ShippedNames())
	if err != nil {
		return nil, nil, nil, err
	}
	// A bench file names its profiles relative to itself.
	read := func(path string) ([]byte, error) {
		if !filepath.IsAbs(path) {
			path = filepath.Join(filepath.Dir(name), path)
		}
		return os.ReadFile(path)
	}
	loaded, file, problems := bench.Load(name, text, read)
	return loaded, file, problems, nil
}

// keyFolder is where the station's key lies: with the user's settings, outside every ledger.
func keyFolder() (string, error) {
	base, err := os.UserConfigDir()
	if err != nil {
		return "", fmt.Errorf("no place for the station's key: %w", err)
	}
	return filepath.Join(base, "proofrate", "keys"), nil
}

func printJSON(cmd *cobra.Command, what any) error {
	out := json.NewEncoder(cmd.OutOrStdout())
	out.SetEscapeHTML(false)
	out.SetIndent("", "  ")
	return out.Encode(what)
}

// assignments reads KEY=VALUE flags.
func assignments(flag string, list []string) (map[string]string, error) {
	pairs := map[string]string{}
	for _, text := range list {
		key, value, ok := strings.Cut(text, "=")
		if !ok || key == "" || value == "" {
			return nil, fmt.Errorf("--%s %s: expected the form NAME=VALUE", flag, text)
		}
		if _, twice := pairs[key]; twice {
			return nil, fmt.Errorf("--%s: %s is given twice", flag, key)
		}
		pairs[key] = value
	}
	return pairs, nil
}
