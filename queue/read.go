package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"strings"
	"time"
)

// Reader answers questions about a ledger. Its methods may be called from any
// goroutine and do not hold up the writer.
type Reader struct {
	db  *sql.DB
	now func() time.Time
}

// OpenReadOnly opens the ledger at path beside the process that holds it, or
// with none. The schema must be this program's.
func OpenReadOnly(ctx context.Context, path string) (*Reader, error) {
	db, err := openReader(ctx, path)
	if err != nil {
		return nil, fmt.Errorf("read ledger %q: %w", path, err)
	}
	r := &Reader{db: db, now: time.Now}
	have, err := hasTable(ctx, db, "meta")
	if err == nil && !have {
		err = errors.New("this is no ledger: it has no table \"meta\"")
	}
	if err == nil {
		err = checkVersion(ctx, db)
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("read ledger %q: %w", path, err), r.Close())
	}
	return r, nil
}

// Close ends the reader. A Store closes its own.
func (r *Reader) Close() error { return r.db.Close() }

// Cursor is a place in the list of shots: the Taken and ID of the last one seen.
type Cursor struct {
	Taken time.Time
	ID    int64
}

// Filter chooses shots. Its zero value chooses all of them.
type Filter struct {
	Station string    // "": all
	States  []State   // empty: all
	Verdict string    // "": all
	Since   time.Time // taken at or after; zero: no limit
	Until   time.Time // taken before; zero: no limit
	Text    string    // part of the name or the reason, letter case ignored for A to Z; "": all
	Before  *Cursor   // only what follows that shot in the list; nil: from the newest
	Limit   int       // how many; 0: 100
}

const defaultLimit = 100

// Shots lists shots, latest taken first. For the next page, set Before to the
// last shot's Cursor.
func (r *Reader) Shots(ctx context.Context, f Filter) ([]Shot, error) {
	where, args := f.where()
	limit := f.Limit
	if limit <= 0 {
		limit = defaultLimit
	}
	rows, err := r.db.QueryContext(ctx, "select "+shotColumns+" from shot where "+where+
		" order by taken_ns desc, id desc limit ?", append(args, limit)...)
	if err != nil {
		return nil, fmt.Errorf("list shots: %w", err)
	}
	defer rows.Close()
	var out []Shot
	for rows.Next() {
		var sh Shot
		if err := sh.scan(rows.Scan); err != nil {
			return nil, fmt.Errorf("list shots: %w", err)
		}
		out = append(out, sh)
	}
	return out, rows.Err()
}

// Cursor is the shot's place in the list.
func (sh Shot) Cursor() *Cursor { return &Cursor{sh.Taken, sh.ID} }

func (f Filter) where() (string, []any) {
	where, args := []string{"1 = 1"}, []any{}
	add := func(cond string, a ...any) {
		where, args = append(where, cond), append(args, a...)
	}
	if f.Station != "" {
		add("station = ?", f.Station)
	}
	if len(f.States) > 0 {
		marks := strings.Repeat(", ?", len(f.States))[2:]
		states := make([]any, len(f.States))
		for i, s := range f.States {
			states[i] = s
		}
		add("state in ("+marks+")", states...)
	}
	if f.Verdict != "" {
		add("verdict = ?", f.Verdict)
	}
	if !f.Since.IsZero() {
		add("taken_ns >= ?", ns(f.Since))
	}
	if !f.Until.IsZero() {
		add("taken_ns < ?", ns(f.Until))
	}
	if f.Text != "" {
		text := strings.NewReplacer(`\`, `\\`, "%", `\%`, "_", `\_`).Replace(strings.ToLower(f.Text))
		add(`(lower(name) like ? escape '\' or lower(reason) like ? escape '\')`, "%"+text+"%", "%"+text+"%")
	}
	if f.Before != nil {
		add("(taken_ns, id) < (?, ?)", ns(f.Before.Taken), f.Before.ID)
	}
	return strings.Join(where, " and "), args
}

const shotColumns = `id, station, name, taken_ns, streak_path, reference_path, coalesce(streak_frame, 0),
	coalesce(reference_frame, 0), gap_ns, state, reason, verdict, summary, result_dir, shown_pass, shown_bundle,
	bundle_id, replaced, created_ns, updated_ns, done_ns`

func (sh *Shot) scan(scan func(...any) error) error {
	var taken, created, updated, finished int64
	var summary string
	err := scan(&sh.ID, &sh.Station, &sh.Name, &taken, &sh.StreakPath, &sh.ReferencePath, &sh.Streak,
		&sh.Reference, (*int64)(&sh.Gap), &sh.State, &sh.Reason, &sh.Verdict, &summary, &sh.ResultDir, &sh.ShownPass,
		&sh.ShownBundle, &sh.BundleID, &sh.Replaced, &created, &updated, &finished)
	sh.Taken, sh.Created, sh.Updated, sh.Finished = at(taken), at(created), at(updated), at(finished)
	if summary != "" {
		sh.Summary = []byte(summary)
	}
	return err
}

func shotWhere(ctx context.Context, q querier, where string, args ...any) (Shot, error) {
	var sh Shot
	err := sh.scan(q.QueryRowContext(ctx, "select "+shotColumns+" from shot where "+where, args...).Scan)
	if errors.Is(err, sql.ErrNoRows) {
		return sh, ErrNotFound
	}
	return sh, err
}

// Shot returns one shot and its attempts, oldest first.
func (r *Reader) Shot(ctx context.Context, id int64) (Shot, []Attempt, error) {
	sh, err := shotWhere(ctx, r.db, "id = ?", id)
	if err != nil {
		return sh, nil, fmt.Errorf("look up shot %d: %w", id, err)
	}
	attempts, err := r.attempts(ctx, id)
	if err != nil {
		return sh, nil, fmt.Errorf("list the attempts of shot %d: %w", id, err)
	}
	return sh, attempts, nil
}

// ShotNamed returns a station's shot of that name.
func (r *Reader) ShotNamed(ctx context.Context, station, name string) (Shot, error) {
	sh, err := shotWhere(ctx, r.db, "station = ? and name = ? order by streak_frame is null, id limit 1", station, name)
	if err != nil {
		return sh, fmt.Errorf("look up shot %q of station %q: %w", name, station, err)
	}
	return sh, nil
}

func (r *Reader) attempts(ctx context.Context, shot int64) ([]Attempt, error) {
	rows, err := r.db.QueryContext(ctx, `
		select id, shot_id, pass, bundle_id, number, started_ns, ended_ns, outcome, error, host
		from attempt where shot_id = ? order by id`, shot)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var out []Attempt
	for rows.Next() {
		var a Attempt
		var started, ended int64
		if err := rows.Scan(&a.ID, &a.ShotID, &a.Pass, &a.Bundle, &a.Number, &started, &ended, &a.Outcome, &a.Error, &a.Host); err != nil {
			return nil, err
		}
		a.Started, a.Ended = at(started), at(ended)
		out = append(out, a)
	}
	return out, rows.Err()
}
