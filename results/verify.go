package results

import (
	"context"
	"crypto/ed25519"
	"crypto/sha256"
	"database/sql"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
)

// Finding is something in the ledger that is not as it was sealed.
type Finding struct {
	Where  string // "entry hall-1/7", "table figures", "recording 0193.../A.rec"
	Detail string
}

func (f Finding) String() string { return f.Where + ": " + f.Detail }

// derived are the tables that follow from the entries.
var derived = []string{"runs", "parameters", "instruments", "trial_index", "recordings", "figures", "judgements", "events"}

// Verify walks the chains, the signatures, the documents and the recordings, derives the index anew and compares it
// row by row, compares the schema, and lists all that is not as it was sealed. A sound ledger gives none.
func (l *Ledger) Verify(ctx context.Context) ([]Finding, error) {
	v := verifier{ledger: l, ctx: ctx}
	for _, step := range []func() error{v.database, v.chains, v.documents, v.index, v.recordings} {
		if err := step(); err != nil {
			return v.findings, explained(err)
		}
	}
	return v.findings, nil
}

type verifier struct {
	ledger   *Ledger
	ctx      context.Context
	findings []Finding
	entries  []entry
}

func (v *verifier) found(where, format string, args ...any) {
	v.findings = append(v.findings, Finding{where, fmt.Sprintf(format, args...)})
}

// database asks SQLite for its own opinion.
func (v *verifier) database() error {
	var said string
	if err := v.ledger.read.QueryRowContext(v.ctx, "PRAGMA integrity_check(1)").Scan(&said); err != nil {
		return err
	}
	if said != "ok" {
		v.found("ledger.db", "SQLite's integrity check says: %s", said)
	}
	return nil
}

// chains walks every station's entries.
func (v *verifier) chains() error {
	rows, err := v.ledger.read.QueryContext(v.ctx, "SELECT station, number, kind, text, before, digest, key, signature FROM entries ORDER BY station, number")
	if err != nil {
		return err
	}
	defer rows.Close()
	keys := map[string]ed25519.PublicKey{}
	for rows.Next() {
		var e entry
		if err := rows.Scan(&e.station, &e.number, &e.kind, &e.text, &e.before, &e.digest, &e.key, &e.signature); err != nil {
			return err
		}
		v.entry(e, keys)
		v.entries = append(v.entries, e)
	}
	return rows.Err()
}

func (v *verifier) entry(e entry, keys map[string]ed25519.PublicKey) {
	where := fmt.Sprintf("entry %s/%d", e.station, e.number)
	number, before := 1, noEntry
	if n := len(v.entries); n > 0 && v.entries[n-1].station == e.station {
		number, before = v.entries[n-1].number+1, v.entries[n-1].digest
	}
	if e.number != number {
		v.found(where, "entry %d should stand here; one is missing", number)
	}
	if e.before != before {
		v.found(where, "the digest before it is not that of the entry before it")
	}
	var head struct {
		Kind    string `json:"kind"`
		Station string `json:"station"`
	}
	if err := json.Unmarshal([]byte(e.text), &head); err != nil || head.Kind != e.kind || head.Station != e.station {
		v.found(where, "its kind or station is not what its text says")
	}
	if e.kind == "key" {
		var k keyEntry
		public, err := []byte(nil), json.Unmarshal([]byte(e.text), &k)
		if err == nil {
			public, err = base64.StdEncoding.DecodeString(k.Public)
		}
		if err != nil || len(public) != ed25519.PublicKeySize {
			v.found(where, "it holds no public key")
			return
		}
		keys[fingerprint(public)] = public
	}
	digest, err := digestOf(e.before, e.text)
	if err != nil || digest != e.digest {
		v.found(where, "its text or its digest was changed")
		return
	}
	raw, _ := hex.DecodeString(e.digest)
	signature, err := base64.StdEncoding.DecodeString(e.signature)
	if public := keys[e.key]; public == nil {
		v.found(where, "it is signed with a key that no entry before it makes known")
	} else if err != nil || !ed25519.Verify(public, raw, signature) {
		v.found(where, "its signature does not fit")
	}
	if again := base64.StdEncoding.EncodeToString(signature); again != e.signature {
		v.found(where, "its signature is written in another way than it was")
	}
}

// documents holds every stored text against its digest.
func (v *verifier) documents() error {
	rows, err := v.ledger.read.QueryContext(v.ctx, "SELECT digest, text FROM documents ORDER BY digest")
	if err != nil {
		return err
	}
	defer rows.Close()
	stored := map[string]bool{}
	for rows.Next() {
		var digest string
		var text []byte
		if err := rows.Scan(&digest, &text); err != nil {
			return err
		}
		stored[digest] = true
		if "sha256:"+sha256Hex(text) != digest {
			v.found("document "+digest, "its text was changed")
		}
	}
	for _, e := range v.entries {
		var run runEvidence
		if e.kind != "run" || json.Unmarshal([]byte(e.text), &run) != nil {
			continue
		}
		wanted := []string{run.Procedure.Digest, run.Bench.Digest}
		for _, i := range run.Instruments {
			wanted = append(wanted, i.ProfileDigest)
		}
		for _, digest := range wanted {
			if !stored[digest] {
				v.found("document "+digest, "it is missing; run %s depends on it", run.Run)
			}
		}
	}
	return rows.Err()
}

// index derives schema and tables anew in memory and compares.
func (v *verifier) index() error {
	db, err := sql.Open("sqlite3", ":memory:")
	if err != nil {
		return err
	}
	defer db.Close()
	db.SetMaxOpenConns(1)
	for _, name := range migrations() {
		text, err := schema.ReadFile(name)
		if err != nil {
			return err
		}
		if _, err := db.Exec(string(text)); err != nil {
			return err
		}
	}
	tx, err := db.Begin()
	if err != nil {
		return err
	}
	defer tx.Rollback()
	for _, e := range v.entries {
		if err := index(tx, e); err != nil {
			v.found(fmt.Sprintf("entry %s/%d", e.station, e.number), "no index can be derived from it: %v", err)
		}
	}
	if err := v.compare("schema", tx, "SELECT type, name, tbl_name, sql FROM sqlite_schema WHERE name NOT LIKE 'sqlite_%' ORDER BY type, name"); err != nil {
		return err
	}
	for _, table := range derived {
		if err := v.compare("table "+table, tx, "SELECT * FROM "+table+" ORDER BY 1, 2, 3"); err != nil {
			return err
		}
	}
	return nil
}

// compare runs one query on both and tells the first row that differs.
func (v *verifier) compare(where string, fresh *sql.Tx, query string) error {
	want, err := dump(fresh.QueryContext(v.ctx, query))
	if err != nil {
		return err
	}
	got, err := dump(v.ledger.read.QueryContext(v.ctx, query))
	if err != nil {
		v.found(where, "it cannot be read: %v", err)
		return nil
	}
	for i := range max(len(want), len(got)) {
		switch {
		case i >= len(got):
			v.found(where, "a row is missing: %s", short(want[i]))
		case i >= len(want):
			v.found(where, "a row that no entry explains: %s", short(got[i]))
		case want[i] != got[i]:
			v.found(where, "row %d is %s, the entries say %s", i+1, short(got[i]), short(want[i]))
		default:
			continue
		}
		return nil
	}
	return nil
}

func short(row string) string {
	if len(row) > 200 {
		return row[:200] + "..."
	}
	return row
}

// dump gives each row as one text, with the type of every value.
func dump(rows *sql.Rows, err error) ([]string, error) {
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	columns, err := rows.Columns()
	if err != nil {
		return nil, err
	}
	values, into := make([]any, len(columns)), make([]any, len(columns))
	for i := range values {
		into[i] = &values[i]
	}
	var list []string
	for rows.Next() {
		if err := rows.Scan(into...); err != nil {
			return nil, err
		}
		parts := make([]string, len(values))
		for i, x := range values {
			parts[i] = fmt.Sprintf("%s=%T(%v)", columns[i], x, x)
		}
		list = append(list, strings.Join(parts, " "))
	}
	return list, rows.Err()
}

// recordings holds every file against its digest, and every section too where the file differs, so that the finding
// says which recording it is. A file that no row names is reported; nothing is ever deleted.
func (v *verifier) recordings() error {
	known := map[string]bool{}
	open, err := v.ledger.open(v.ctx)
	if err != nil {
		return err
	}
	live := map[string]bool{}
	for _, e := range open {
		live[e.Run] = true
	}
	for _, e := range v.entries {
		var run runEvidence
		if e.kind != "run" || json.Unmarshal([]byte(e.text), &run) != nil {
			continue
		}
		for _, t := range run.Trials {
			if t.Recording.File == "" {
				continue
			}
			known[t.Recording.File] = true
			if err := v.file(t.Recording); err != nil {
				return err
			}
		}
	}
	root := v.ledger.recordings()
	return filepath.WalkDir(root, func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		name, err := filepath.Rel(root, path)
		if err != nil {
			return err
		}
		name = filepath.ToSlash(name)
		if run, _, _ := strings.Cut(name, "/"); !known[name] && !live[run] {
			v.found("recording "+name, "no entry names this file")
		}
		return v.ctx.Err()
	})
}

func (v *verifier) file(want fileEvidence) error {
	where := "recording " + want.File
	file, err := os.Open(v.ledger.recordings(filepath.FromSlash(want.File)))
	if errors.Is(err, fs.ErrNotExist) {
		v.found(where, "the file is missing")
		return nil
	}
	if err != nil {
		return err
	}
	defer file.Close()
	h := sha256.New()
	n, err := io.Copy(h, file)
	if err != nil {
		return err
	}
	if n != want.Bytes || hex.EncodeToString(h.Sum(nil)) != want.SHA256 {
		v.found(where, "the file was changed: %d bytes, %d were sealed, and another digest", n, want.Bytes)
	}
	return v.ctx.Err()
}
