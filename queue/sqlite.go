package queue

import (
	"context"
	"database/sql"
	_ "embed"
	"errors"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"strings"

	"github.com/riverqueue/river"
	"github.com/riverqueue/river/riverdriver"
	"github.com/riverqueue/river/riverdriver/riversqlite"
	"modernc.org/sqlite"
	sqlite3 "modernc.org/sqlite/lib"
)

// This file, and schema_sqlite.sql, hold all that is peculiar to SQLite.

//go:embed schema_sqlite.sql
var schemaSQL string

// dsn makes the connection string of the ledger at path. A path may hold any
// character that the operating system allows, so it is escaped as a URI.
func dsn(path string, query url.Values) (string, error) {
	abs, err := filepath.Abs(path)
	if err != nil {
		return "", err
	}
	p := filepath.ToSlash(abs)
	if !strings.HasPrefix(p, "/") {
		p = "/" + p // C:/state/ledger becomes /C:/state/ledger
	}
	return "file://" + (&url.URL{Path: p}).EscapedPath() + "?" + query.Encode(), nil
}

// openWriter opens the one connection that writes.
func openWriter(path string) (*sql.DB, error) {
	name, err := dsn(path, url.Values{
		"_txlock": {"immediate"},
		"_pragma": {"busy_timeout(5000)", "journal_mode(WAL)", "synchronous(FULL)"},
	})
	if err != nil {
		return nil, err
	}
	db, err := sql.Open("sqlite", name)
	if err != nil {
		return nil, err
	}
	db.SetMaxOpenConns(1)
	return db, nil
}

// readers is how many queries of pages and commands run at once.
const readers = 4

// openReader opens connections that can only read. They open the file for
// writing if they may, because a reader of a WAL has to write into its index;
// query_only keeps them from writing anything else.
func openReader(ctx context.Context, path string) (*sql.DB, error) {
	if _, err := os.Stat(path); err != nil {
		return nil, err // SQLite would only say "unable to open database file"
	}
	var errs []error
	for _, mode := range []string{"rw", "ro"} {
		name, err := dsn(path, url.Values{
			"mode":    {mode},
			"_pragma": {"busy_timeout(5000)", "query_only(1)"},
		})
		if err != nil {
			return nil, err
		}
		db, err := sql.Open("sqlite", name)
		if err != nil {
			return nil, err
		}
		db.SetMaxOpenConns(readers)
		var n int
		err = db.QueryRowContext(ctx, "select count(*) from sqlite_master").Scan(&n)
		if err == nil {
			return db, nil
		}
		errs = append(errs, err, db.Close())
	}
	return nil, errors.Join(errs...)
}

func driverOf(db *sql.DB) riverdriver.Driver[*sql.Tx] { return riversqlite.New(db) }

// passing reports whether err may go away by itself or by somebody's hand: disk
// full, share away, file locked by a backup.
func passing(err error) bool {
	var e *sqlite.Error
	if !errors.As(err, &e) {
		return false
	}
	switch e.Code() & 0xff { // the primary code
	case sqlite3.SQLITE_BUSY, sqlite3.SQLITE_FULL, sqlite3.SQLITE_IOERR, sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN:
		return true
	}
	return false
}

// completeTx marks a running job as done within tx.
func completeTx(ctx context.Context, tx *sql.Tx, job *river.Job[jobArgs]) error {
	_, err := river.JobCompleteTx[*riversqlite.Driver](ctx, tx, job)
	return err
}

// hasTable reports whether the ledger has a table of that name.
func hasTable(ctx context.Context, q querier, name string) (bool, error) {
	var n int
	err := q.QueryRowContext(ctx, "select count(*) from sqlite_master where type = 'table' and name = ?", name).Scan(&n)
	return n > 0, err
}

// The rest changes River's own rows where River has no call for it. All of it
// is allowed only to the one process that holds the lock, before it runs a
// client, or for a job which that process is running.

// resetRunning gives the jobs of a dead process back, keeping their places, and
// ends that process's leadership, which River would otherwise wait out.
func resetRunning(ctx context.Context, tx *sql.Tx) (int64, error) {
	if _, err := tx.ExecContext(ctx, "delete from river_leader"); err != nil {
		return 0, fmt.Errorf("end the leadership of a dead process: %w", err)
	}
	res, err := tx.ExecContext(ctx, "update river_job set state = 'available' where state = 'running'")
	if err != nil {
		return 0, fmt.Errorf("give back running jobs: %w", err)
	}
	// A clock that was set back would hold up every job by as much.
	if _, err := tx.ExecContext(ctx, `
		update river_job set scheduled_at = datetime('now', 'subsec')
		where state = 'available' and scheduled_at > datetime('now', 'subsec')`); err != nil {
		return 0, fmt.Errorf("correct the times of jobs: %w", err)
	}
	return res.RowsAffected()
}

// moveJob puts a job into another of River's queues.
func moveJob(ctx context.Context, tx *sql.Tx, jobID int64, queue string) error {
	_, err := tx.ExecContext(ctx, "update river_job set queue = ? where id = ?", queue, jobID)
	return err
}

// retireJob takes a job from River for good, whatever state it is in; one that is
// finished or gone stays as it is. River's own cancel leaves a running job to
// its executor: until that has spoken, the job would stand in the way of a new
// one with the same key, and then take that one's place in the ledger with it.
func retireJob(ctx context.Context, tx *sql.Tx, jobID int64) error {
	_, err := tx.ExecContext(ctx, `
		update river_job set state = 'cancelled', finalized_at = datetime('now', 'subsec')
		where id = ? and state not in ('completed', 'cancelled', 'discarded')`, jobID)
	return err
}

// lostJobs lists the shots whose ledger says that a job waits where River has
// none. It is empty unless rows were removed by a foreign hand.
const lostJobs = `
	select w.shot_id, w.pass, w.bundle_id from work w
	left join river_job j on j.id = w.job_id and j.state not in ('completed', 'cancelled', 'discarded')
	where w.state in ('queued', 'later', 'failed') and j.id is null`
