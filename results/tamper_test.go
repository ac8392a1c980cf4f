package results

import (
	"bytes"
	"context"
	"database/sql"
	"fmt"
	"os"
	"path/filepath"
	"testing"
)

// tamper opens the database as anybody could, with the triggers out of the way.
func tamper(t *testing.T, dir string, do func(db *sql.DB)) {
	t.Helper()
	path, _ := filepath.Abs(filepath.Join(dir, "ledger.db"))
	db, err := sql.Open("sqlite3", dsn(path, "rw", nil))
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	db.SetMaxOpenConns(1)
	if _, err := db.Exec("PRAGMA foreign_keys = off"); err != nil {
		t.Fatal(err)
	}
	do(db)
}

// TestTampering changes every column of every row of every table, deletes every row and doubles every entry; each is found.
func TestTampering(t *testing.T) {
	l, dir := opened(t)
	carriedOut(t, l, "100")
	carriedOut(t, l, "101")
	sound(t, l)
	found := func() bool {
		findings, err := l.Verify(context.Background())
		return err != nil || len(findings) > 0
	}
	attempts := 0
	try := func(db *sql.DB, what, do string, args ...any) {
		t.Helper()
		tx, err := db.Begin()
		if err != nil {
			t.Fatal(err)
		}
		if _, err := tx.Exec(do, args...); err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		if err := tx.Commit(); err != nil {
			t.Fatal(err)
		}
		attempts++
		if !found() {
			t.Errorf("%s was not found", what)
		}
	}
	tamper(t, dir, func(db *sql.DB) {
		for _, table := range append([]string{"entries", "documents"}, derived...) {
			for _, trigger := range []string{"_kept", "_unchanged"} {
				if _, err := db.Exec("DROP TRIGGER " + table + trigger); err != nil {
					t.Fatal(err)
				}
			}
		}
		if !found() {
			t.Error("dropped triggers were not found")
		}
		for _, table := range append([]string{"entries", "documents"}, derived...) {
			ids, columns := shape(t, db, table)
			for _, id := range ids {
				keep := fmt.Sprintf("SELECT * FROM %s WHERE rowid = %d", table, id)
				for _, column := range columns {
					var old any
					if err := db.QueryRow(fmt.Sprintf("SELECT %s FROM %s WHERE rowid = %d", column, table, id)).Scan(&old); err != nil {
						t.Fatal(err)
					}
					var fresh any = 987654321
					switch x := old.(type) {
					case string:
						fresh = x + "~"
					case []byte:
						fresh = append(append([]byte{}, x...), '~')
					}
					what := fmt.Sprintf("%s.%s of row %d", table, column, id)
					try(db, what, fmt.Sprintf("UPDATE %s SET %s = ? WHERE rowid = %d", table, column, id), fresh)
					if _, err := db.Exec(fmt.Sprintf("UPDATE %s SET %s = ? WHERE rowid = %d", table, column, id), old); err != nil {
						t.Fatal(err)
					}
				}
				if _, err := db.Exec("CREATE TEMP TABLE kept AS " + keep); err != nil {
					t.Fatal(err)
				}
				try(db, fmt.Sprintf("deleting row %d of %s", id, table), fmt.Sprintf("DELETE FROM %s WHERE rowid = %d", table, id))
				for _, back := range []string{"INSERT INTO " + table + " SELECT * FROM temp.kept", "DROP TABLE temp.kept"} {
					if _, err := db.Exec(back); err != nil {
						t.Fatal(err)
					}
				}
			}
		}
		try(db, "a view that lies", "DROP VIEW trials; ")
	})
	if attempts < 100 {
		t.Errorf("%d attempts", attempts)
	}
}

// shape gives a table's rowids and columns.
func shape(t *testing.T, db *sql.DB, table string) (ids []int, columns []string) {
	t.Helper()
	rows, err := db.Query("SELECT rowid, * FROM " + table)
	if err != nil {
		t.Fatal(err)
	}
	defer rows.Close()
	all, err := rows.Columns()
	if err != nil {
		t.Fatal(err)
	}
	into := make([]any, len(all))
	for i := range into {
		into[i] = new(any)
	}
	for rows.Next() {
		if err := rows.Scan(into...); err != nil {
			t.Fatal(err)
		}
		ids = append(ids, int((*into[0].(*any)).(int64)))
	}
	return ids, all[1:]
}

// TestEveryByteOfARecording: each changed byte is found, and a missing and an extra file.
func TestEveryByteOfARecording(t *testing.T) {
	l, dir := opened(t)
	r := carriedOut(t, l, "100")
	path := filepath.Join(dir, "recordings", r.ID(), "A.rec")
	whole, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	check := func(what string) {
		t.Helper()
		v := verifier{ledger: l, ctx: context.Background()}
		if err := v.chains(); err != nil {
			t.Fatal(err)
		}
		if err := v.recordings(); err != nil || len(v.findings) == 0 {
			t.Errorf("%s was not found (%v)", what, err)
		}
	}
	for i := range whole {
		broken := bytes.Clone(whole)
		broken[i] ^= 1
		if err := os.WriteFile(path, broken, 0o644); err != nil {
			t.Fatal(err)
		}
		check(fmt.Sprintf("byte %d", i))
	}
	os.Remove(path)
	check("a missing file")
	os.WriteFile(path, whole, 0o644)
	sound(t, l)
	os.WriteFile(filepath.Join(dir, "recordings", "extra.rec"), whole, 0o644)
	check("an extra file")
}
