package results

import (
	"crypto/ed25519"
	"crypto/rand"
	"crypto/sha256"
	"database/sql"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"github.com/gowebpki/jcs"
)

// entry is one link of the chain. SEAL.md is its specification.
type entry struct {
	station   string
	number    int
	kind      string
	text      string // canonical JSON
	before    string
	digest    string
	key       string
	signature string
}

// noEntry is the digest before the first entry.
var noEntry = strings.Repeat("0", 64)

// digestOf is the SHA-256 of the 32 bytes of the digest before and the text.
func digestOf(before, text string) (string, error) {
	p, err := hex.DecodeString(before)
	if err != nil || len(p) != sha256.Size {
		return "", fmt.Errorf("%q is no digest", before)
	}
	return sha256Hex(append(p, text...)), nil
}

// canonical is a value's JSON by RFC 8785.
func canonical(v any) (string, error) {
	plain, err := json.Marshal(v)
	if err != nil {
		return "", err // a number that is not finite is refused here
	}
	text, err := jcs.Transform(plain)
	return string(text), err
}

// keyEntry is the text of an entry that makes a station's key known.
type keyEntry struct {
	Kind    string `json:"kind"` // "key"
	Station string `json:"station"`
	Made    string `json:"made"`
	Public  string `json:"public"` // base64
}

// stationKey gives the station's key, made on first use, outside the ledger and for its owner only.
func (l *Ledger) stationKey(station string) (ed25519.PrivateKey, error) {
	path := filepath.Join(l.keyDir, fileName(station)+".ed25519")
	text, err := os.ReadFile(path)
	switch {
	case err == nil:
		seed, err := base64.StdEncoding.DecodeString(strings.TrimSpace(string(text)))
		if err != nil || len(seed) != ed25519.SeedSize {
			return nil, fmt.Errorf("%s holds no key; restore it, or move it away to have a new one made", path)
		}
		return ed25519.NewKeyFromSeed(seed), nil
	case !errors.Is(err, fs.ErrNotExist):
		return nil, fmt.Errorf("key of station %s: %w", station, err)
	}
	_, private, err := ed25519.GenerateKey(rand.Reader)
	if err != nil {
		return nil, err
	}
	if err := os.MkdirAll(l.keyDir, 0o700); err != nil {
		return nil, fmt.Errorf("key of station %s: %w", station, err)
	}
	// Exclusive, so that of two programs at once only one makes the key; the other reads it.
	file, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o600)
	if errors.Is(err, fs.ErrExist) {
		return l.stationKey(station)
	}
	if err != nil {
		return nil, fmt.Errorf("key of station %s: %w", station, err)
	}
	_, err = file.WriteString(base64.StdEncoding.EncodeToString(private.Seed()) + "\n")
	if err = errors.Join(err, file.Sync(), file.Close()); err != nil {
		os.Remove(path)
		return nil, fmt.Errorf("key of station %s: %w", station, err)
	}
	return private, nil
}

// fileName keeps letters, digits, - and _.
func fileName(text string) string {
	return strings.Map(func(r rune) rune {
		if r == '-' || r == '_' || r >= '0' && r <= '9' || r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' {
			return r
		}
		return '_'
	}, text)
}

func fingerprint(public ed25519.PublicKey) string { return sha256Hex(public) }

// append adds an entry to a station's chain, and before it, if need be, the entry that makes the key known.
func (l *Ledger) append(tx *sql.Tx, station, kind, made string, v any) (entry, error) {
	private, err := l.stationKey(station)
	if err != nil {
		return entry{}, err
	}
	public := private.Public().(ed25519.PublicKey)
	var known int
	err = tx.QueryRow("SELECT count(*) FROM entries WHERE station = ? AND kind = 'key' AND key = ?", station, fingerprint(public)).Scan(&known)
	if err != nil {
		return entry{}, err
	}
	if known == 0 {
		key := keyEntry{Kind: "key", Station: station, Made: made, Public: base64.StdEncoding.EncodeToString(public)}
		if _, err := link(tx, station, "key", key, private); err != nil {
			return entry{}, err
		}
	}
	return link(tx, station, kind, v, private)
}

// link chains, signs and stores one entry.
func link(tx *sql.Tx, station, kind string, v any, private ed25519.PrivateKey) (entry, error) {
	e := entry{station: station, kind: kind, number: 1, before: noEntry}
	err := tx.QueryRow("SELECT number + 1, digest FROM entries WHERE station = ? ORDER BY number DESC LIMIT 1", station).Scan(&e.number, &e.before)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return e, err
	}
	if e.text, err = canonical(v); err != nil {
		return e, err
	}
	if e.digest, err = digestOf(e.before, e.text); err != nil {
		return e, err
	}
	raw, err := hex.DecodeString(e.digest)
	if err != nil {
		return e, err
	}
	e.key = fingerprint(private.Public().(ed25519.PublicKey))
	e.signature = base64.StdEncoding.EncodeToString(ed25519.Sign(private, raw))
	_, err = tx.Exec("INSERT INTO entries (station, number, kind, text, before, digest, key, signature) VALUES (?,?,?,?,?,?,?,?)",
		e.station, e.number, e.kind, e.text, e.before, e.digest, e.key, e.signature)
	return e, err
}
