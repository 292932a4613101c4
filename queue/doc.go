// Package queue is the ledger of a campaign: which frame files were seen, which
// shots they make, what was tried on each shot and how it ended. Its jobs are
// durable: River (github.com/riverqueue/river) on SQLite, in one file on a local
// disk. The package knows nothing of images; it moves names, times and states.
//
// # Frame files
//
//	          AddFrames               Commit
//	(a file) ----------> waiting ---------------> matched ----> replaced
//	    |                 ^  |  |                    |   (AddFrames: the file's
//	    |                 |  |  +--> lone --+        |    content changed after
//	    +--> rejected     |  +-----> held --+        |    it was matched)
//	         (no time     |                 |        |
//	         can be read) +--- changed -----+        +--> parted (Part: by hand)
//
// Lone, held and parted frames can still be matched by a later Commit.
//
// # Shots
//
//	waiting ---> paired ---> running ---> done
//	  |  ^        ^  ^         |  |        |
//	  v  |        |  |         |  |        +--(Retry)--> paired
//	 held+--------+  |         |  +--> failed --(backoff)--> running
//	  |              |         |         |
//	  v              |         |         +--> quarantined
//	 lone -----------+         +------------> quarantined --(Release, Retry)--> paired
//	 (a late partner)
//
// waiting, held and lone are moved by Commit alone, on behalf of whoever pairs
// frames (and to held by Part). running, done, failed and quarantined are moved
// by Run alone, except that Quarantine gives a shot up by hand, Retry and
// Release put one back to paired, and Open undoes what a crash left half done.
// A shot's state follows its deciding pass: the full one, or the quick look
// where there is no full one. Its quick look makes it running, but can neither
// finish nor fail it; its spread pass leaves it done.
//
// # Jobs
//
// Each pass over a shot is one row of the table work and one River job. Their
// unique key is shot, pass and bundle, among jobs that are not finished: a redo
// under another bundle is another job, a redo under the same one runs again.
// The passes spread and full share slots, spread only when no full one waits;
// the quick look has slots of its own.
//
//	queued --> running --> done
//	  ^  ^       | | |
//	  |  +-later-+ | +--> quarantined   (Permanent, or attempts used up)
//	  +---failed---+
//
// Who may do what with a job: River alone decides when one starts. Its start
// and its end are one transaction each, which also writes the attempt and the
// shot. The end counts only if the job's row still names the attempt that
// ended (the fence); otherwise its result is dropped and logged. Every attempt
// ever started stays in the ledger, but of pauses in a row only the last; River
// forgets finished jobs after a day.
//
// # What survives a crash
//
// Everything committed, which is all that a call reported as done: SQLite runs
// in WAL mode with synchronous=FULL. A job that was running is not lost and not
// trusted: at the next Open its attempt ends as "crashed" and is counted, and it
// is marked suspect. Run works suspects first, one at a time, with nothing
// beside them, so that a shot that brings the service down is found within
// MaxAttempts starts and takes no other shot with it. A job may therefore run
// twice; a worker must write its result so that this does no harm, publishing
// before it returns. An interruption by Run's context is no attempt at all.
//
// # One process
//
// A ledger belongs to the process that holds the lock file beside it. Others
// read it, at any time, by OpenReadOnly. The file must lie on a local disk:
// network shares break SQLite's locks.
//
// The writing side is one connection. Within a transaction, therefore, no
// method of the Store and no River method without Tx may be called: it would
// wait for itself for ever.
//
// All that is peculiar to SQLite is in sqlite.go and schema_sqlite.sql. The
// statements elsewhere are SQL that PostgreSQL reads too, but for the marks of
// their parameters, and run in a *sql.Tx, which River drives on both. Every
// engine must pass package queuetest.
package queue
