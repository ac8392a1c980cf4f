package results

import (
	"context"
	"crypto/sha256"
	"database/sql"
	"embed"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"sync"

	"github.com/gofrs/flock"
	sqlite3 "github.com/mattn/go-sqlite3"
)

// Ledger is an open ledger. One process writes at a time, as SQLite has it; any number read.
type Ledger struct {
	dir    string
	keyDir string
	write  *sql.DB // one connection; nil if the ledger was opened for reading
	read   *sql.DB
	seal   sync.Mutex
}

// applicationID marks a database as ours: "prfr".
const applicationID = 0x70726672

//go:embed schema/*.sql
var schema embed.FS

// migrations are the schema's steps, in order; user_version counts those that were applied.
func migrations() []string {
	names, err := fs.Glob(schema, "schema/*.sql")
	if err != nil {
		panic("results: " + err.Error())
	}
	return names
}

// dsn is the database's address. Everything that a connection needs stands in it, since pragmas are a connection's own.
func dsn(path, mode string, more url.Values) string {
	q := url.Values{"mode": {mode}, "_foreign_keys": {"on"}, "_busy_timeout": {"10000"}}
	for key, value := range more {
		q[key] = value
	}
	u := url.URL{Scheme: "file", OmitHost: true, Path: path, RawQuery: q.Encode()}
	return u.String()
}

// OpenLedger opens a ledger for writing and makes it if it is not there. Runs that a dead process left open are sealed
// as broken off. The station's key is made in keyDir when it is first needed.
func OpenLedger(dir, keyDir string) (*Ledger, error) {
	if err := os.MkdirAll(filepath.Join(dir, "recordings"), 0o755); err != nil {
		return nil, fmt.Errorf("ledger %s: %w; choose a folder that can be written with --ledger", dir, err)
	}
	// One at a time: SQLite refuses to turn on its write-ahead log while another does, and waits for nobody then.
	opening := flock.New(filepath.Join(dir, "ledger.lock"))
	if err := opening.Lock(); err != nil {
		return nil, fmt.Errorf("ledger %s: %w; choose a folder that can be written with --ledger", dir, err)
	}
	defer opening.Unlock()
	l := &Ledger{dir: dir, keyDir: keyDir}
	path, err := filepath.Abs(filepath.Join(dir, "ledger.db"))
	if err != nil {
		return nil, err
	}
	l.write, err = sql.Open("sqlite3", dsn(path, "rwc", url.Values{"_journal_mode": {"WAL"}, "_synchronous": {"FULL"}, "_txlock": {"immediate"},
		"_recursive_triggers": {"on"}}))
	if err != nil {
		return nil, err
	}
	l.write.SetMaxOpenConns(1)
	if err := l.migrate(); err != nil {
		l.write.Close()
		return nil, fmt.Errorf("ledger %s: %w", dir, explained(err))
	}
	if err := l.reader(path); err != nil {
		l.write.Close()
		return nil, err
	}
	if err := l.sealBroken(); err != nil {
		l.Close()
		return nil, fmt.Errorf("ledger %s: %w", dir, explained(err))
	}
	return l, nil
}

// ReadLedger opens a ledger that exists, for questions only.
func ReadLedger(dir string) (*Ledger, error) {
	path, err := filepath.Abs(filepath.Join(dir, "ledger.db"))
	if err != nil {
		return nil, err
	}
	if _, err := os.Stat(path); err != nil {
		if errors.Is(err, fs.ErrNotExist) {
			return nil, fmt.Errorf("there is no ledger in %s; a run makes one, or name another folder with --ledger", dir)
		}
		return nil, fmt.Errorf("ledger %s: %w", dir, err)
	}
	l := &Ledger{dir: dir}
	if err := l.reader(path); err != nil {
		return nil, err
	}
	application, version, err := versions(l.read)
	if err == nil {
		err = ours(application, version)
	}
	if err != nil {
		l.Close()
		return nil, fmt.Errorf("ledger %s: %w", dir, explained(err))
	}
	return l, nil
}

func (l *Ledger) reader(path string) error {
	var err error
	l.read, err = sql.Open("sqlite3", dsn(path, "ro", url.Values{"_query_only": {"on"}}))
	return err
}

// Close closes the database. The write-ahead log is emptied first, so that a copy of the file is whole.
func (l *Ledger) Close() error {
	var errs []error
	if l.read != nil {
		errs = append(errs, l.read.Close())
	}
	if l.write != nil {
		_, err := l.write.Exec("PRAGMA wal_checkpoint(TRUNCATE)")
		errs = append(errs, err, l.write.Close())
	}
	return errors.Join(errs...)
}

// asker is a database or a transaction.
type asker interface {
	QueryRow(query string, args ...any) *sql.Row
}

// versions reads application_id and user_version.
func versions(db asker) (application, version int, err error) {
	if err = db.QueryRow("PRAGMA application_id").Scan(&application); err != nil {
		return 0, 0, err
	}
	err = db.QueryRow("PRAGMA user_version").Scan(&version)
	return application, version, err
}

// ours refuses a database of another program or of a newer version.
func ours(application, version int) error {
	switch {
	case application != applicationID:
		return errors.New("ledger.db is a database of another program")
	case version > len(migrations()):
		return fmt.Errorf("ledger.db is of version %d; this program knows up to %d: use a newer proofrate", version, len(migrations()))
	}
	return nil
}

// migrate brings the schema up to date in one transaction, which begins before the version is read: of two programs
// that make a ledger at once, the second finds it made.
func (l *Ledger) migrate() error {
	return l.transaction(func(tx *sql.Tx) error {
		application, version, err := versions(tx)
		if err != nil {
			return err
		}
		if application == 0 && version == 0 {
			var tables int
			if err := tx.QueryRow("SELECT count(*) FROM sqlite_schema").Scan(&tables); err != nil {
				return err
			}
			if tables > 0 {
				return errors.New("ledger.db is a database of another program")
			}
		} else if err := ours(application, version); err != nil {
			return err
		}
		for i, name := range migrations() {
			if i < version {
				continue
			}
			text, err := schema.ReadFile(name)
			if err != nil {
				return err
			}
			if _, err := tx.Exec(string(text)); err != nil {
				return fmt.Errorf("schema step %s: %w", name, err)
			}
			if _, err := tx.Exec(fmt.Sprintf("PRAGMA application_id = %d; PRAGMA user_version = %d", applicationID, i+1)); err != nil {
				return fmt.Errorf("schema step %s: %w", name, err)
			}
		}
		return nil
	})
}

// transaction does what fn does, whole or not at all.
func (l *Ledger) transaction(fn func(tx *sql.Tx) error) error {
	tx, err := l.write.BeginTx(context.Background(), nil)
	if err != nil {
		return err
	}
	if err := fn(tx); err != nil {
		return errors.Join(err, tx.Rollback())
	}
	return tx.Commit()
}

// explained says in words what SQLite says in codes.
func explained(err error) error {
	broken, ok := errors.AsType[sqlite3.Error](err)
	if !ok {
		return err
	}
	words := map[sqlite3.ErrNo]string{
		sqlite3.ErrFull:     "the disk is full; make room and start again, nothing that was sealed is lost",
		sqlite3.ErrBusy:     "another program holds the ledger; end it and start again",
		sqlite3.ErrLocked:   "another program holds the ledger; end it and start again",
		sqlite3.ErrReadonly: "the ledger cannot be written; look at the rights of the folder",
		sqlite3.ErrCantOpen: "the database cannot be opened; look at the folder and its rights",
		sqlite3.ErrNotADB:   "ledger.db is no SQLite database",
		sqlite3.ErrCorrupt:  "ledger.db is damaged; restore a copy",
		sqlite3.ErrIoErr:    "the disk cannot be read or written",
	}
	if text := words[broken.Code]; text != "" {
		return fmt.Errorf("%s (%w)", text, err)
	}
	return err
}

func sha256Hex(p []byte) string {
	sum := sha256.Sum256(p)
	return hex.EncodeToString(sum[:])
}
