package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"sync"
	"sync/atomic"
	"time"

	"github.com/riverqueue/river"
	"github.com/riverqueue/river/rivermigrate"
	"go.uber.org/zap"
)

// schemaVersion is the version of our tables; River counts its own.
const schemaVersion = 1

// Store is an open ledger that this process may change. Its methods may be
// called from any goroutine.
type Store struct {
	Reader
	o       Options
	lock    *lock
	db      *sql.DB // one connection, for writing
	client  *river.Client[*sql.Tx]
	metrics *metrics
	working atomic.Bool

	mu     sync.Mutex
	active map[int64]activeJob // by River job ID; guarded by mu
	next   map[int64]time.Time // when River is to try a job again; guarded by mu

	subs subscribers
}

// activeJob is a job that a worker of this process has in hand.
type activeJob struct {
	shot   int64
	pass   Pass
	cancel context.CancelCauseFunc
}

// Open opens the ledger, making it if there is none, and takes it for this
// process until Close. It brings the schema up to date and puts in order what
// a crash left behind. It starts nothing.
func Open(ctx context.Context, o Options) (*Store, error) {
	if err := o.Validate(); err != nil {
		return nil, fmt.Errorf("open ledger: %w", err)
	}
	o = o.fill()
	if err := os.MkdirAll(filepath.Dir(o.Path), 0o755); err != nil {
		return nil, fmt.Errorf("open ledger %q: make its folder: %w", o.Path, err)
	}
	l, err := acquire(o.Path, o.Clock())
	if err != nil {
		return nil, err
	}
	s := &Store{o: o, lock: l, active: map[int64]activeJob{}, next: map[int64]time.Time{}}
	if err := s.open(ctx); err != nil {
		return nil, errors.Join(fmt.Errorf("open ledger %q: %w", o.Path, err), s.Close())
	}
	return s, nil
}

func (s *Store) open(ctx context.Context) error {
	db, err := openWriter(s.o.Path)
	if err != nil {
		return err
	}
	s.db = db
	if err := checkVersion(ctx, db); err != nil {
		return err
	}
	if err := s.migrate(ctx); err != nil {
		return err
	}
	s.client, err = river.NewClient(driverOf(db), &river.Config{Logger: slogTo(s.o.Logger)})
	if err != nil {
		return fmt.Errorf("set up jobs: %w", err)
	}
	if err := s.recover(ctx); err != nil {
		return fmt.Errorf("put in order what the last run left: %w", err)
	}
	read, err := openReader(ctx, s.o.Path)
	if err != nil {
		return err
	}
	s.Reader = Reader{db: read, now: s.o.Clock}
	s.metrics, err = newMetrics(s.o.Registerer, &s.Reader)
	return err
}

// Close gives the ledger up. It must not be called before Run has returned.
func (s *Store) Close() error {
	var errs []error
	if s.metrics != nil {
		s.metrics.unregister()
	}
	if s.Reader.db != nil {
		errs = append(errs, s.Reader.Close())
	}
	if s.db != nil {
		errs = append(errs, s.db.Close())
	}
	errs = append(errs, s.lock.release())
	return errors.Join(errs...)
}

// checkVersion refuses a ledger of a newer program, before anything is changed.
func checkVersion(ctx context.Context, db *sql.DB) error {
	have, err := hasTable(ctx, db, "meta")
	if err != nil {
		return fmt.Errorf("read its schema: %w (if the file is damaged, put it aside and restore a copy)", err)
	}
	if !have {
		return nil
	}
	v, err := version(ctx, db)
	if err != nil {
		return err
	}
	if v > schemaVersion {
		return fmt.Errorf("%w: its schema is %d, this program knows %d: install that version again, or give this one another state folder", ErrNewer, v, schemaVersion)
	}
	return nil
}

func version(ctx context.Context, q querier) (int, error) {
	var text string
	err := q.QueryRowContext(ctx, "select value from meta where key = 'schema'").Scan(&text)
	if err != nil {
		return 0, fmt.Errorf("read its schema version: %w", err)
	}
	v, err := strconv.Atoi(text)
	if err != nil {
		return 0, fmt.Errorf("read its schema version: %w", err)
	}
	return v, nil
}

// migrate makes River's tables and ours, or brings them up to date.
func (s *Store) migrate(ctx context.Context) error {
	m, err := rivermigrate.New(driverOf(s.db), &rivermigrate.Config{Logger: slogTo(s.o.Logger)})
	if err != nil {
		return fmt.Errorf("bring its job tables up to date: %w", err)
	}
	if _, err := m.Migrate(ctx, rivermigrate.DirectionUp, nil); err != nil {
		return fmt.Errorf("bring its job tables up to date: %w", err)
	}
	return s.inTx(ctx, func(tx *sql.Tx) error {
		have, err := hasTable(ctx, tx, "meta")
		if err != nil || have {
			return err // version 1 is the first: there is none to come from
		}
		if _, err := tx.ExecContext(ctx, schemaSQL); err != nil {
			return fmt.Errorf("make its tables: %w", err)
		}
		_, err = tx.ExecContext(ctx, "insert into meta (key, value) values ('schema', ?), ('created', ?)",
			strconv.Itoa(schemaVersion), s.o.Clock().UTC().Format(time.RFC3339))
		return err
	})
}

// querier is what *sql.DB and *sql.Tx have in common.
type querier interface {
	ExecContext(ctx context.Context, query string, args ...any) (sql.Result, error)
	QueryContext(ctx context.Context, query string, args ...any) (*sql.Rows, error)
	QueryRowContext(ctx context.Context, query string, args ...any) *sql.Row
}

// inTx runs do in one transaction. do must not use s.db or any River call
// without Tx: see the package comment.
func (s *Store) inTx(ctx context.Context, do func(*sql.Tx) error) error {
	tx, err := s.db.BeginTx(ctx, nil)
	if err != nil {
		return fmt.Errorf("begin a transaction: %w", err)
	}
	defer func() { _ = tx.Rollback() }() // after a commit this does nothing
	if err := do(tx); err != nil {
		return err
	}
	if err := tx.Commit(); err != nil {
		return fmt.Errorf("commit: %w", err)
	}
	return nil
}

// exec runs a statement and returns how many rows it changed.
func exec(ctx context.Context, q querier, query string, args ...any) (int64, error) {
	res, err := q.ExecContext(ctx, query, args...)
	if err != nil {
		return 0, err
	}
	return res.RowsAffected()
}

func (s *Store) log() *zap.Logger { return s.o.Logger }
