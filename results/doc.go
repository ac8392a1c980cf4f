// Package results is the ledger: the record of all runs that an auditor can question years later.
//
// A ledger is one folder: ledger.db and recordings/. Its truth is a chain of entries, each a canonical JSON text that
// is hashed with the digest before it and signed; SEAL.md says how, so that somebody else can verify it. The tables are
// an index of the entries, derived from their text alone. A run is open from before its first recording until it is
// sealed; while it is open its process holds a lock, and one whose process has died is sealed as broken off.
//
// Invariants: nothing is ever changed; a digest is over natural keys, never over row numbers; a void number is null
// with a reason beside it; writing never heeds a cancelled context, since a cancelled transaction of SQLite rolls back
// and lets the next statement commit on its own; wall time comes from the caller.
//
//	ledger, err := results.OpenLedger("ledger", keyFolder)
//	run, err := ledger.Begin(start)
//	sink, err := run.Sink("A") // recordings
//	sealed, err := run.Seal(end)
package results
