package queue_test

import (
	"context"
	"path/filepath"
	"testing"

	"go.uber.org/goleak"

	"unsheard/queue"
	"unsheard/queue/queuetest"
)

func TestMain(m *testing.M) {
	beChild()
	goleak.VerifyTestMain(m)
}

func TestSQLite(t *testing.T) {
	queuetest.Run(t, func(t *testing.T) queuetest.Ledger {
		// A name that would break a connection string that is not escaped.
		path := filepath.Join(t.TempDir(), "state #1 50%?", "ledger.db")
		return queuetest.Ledger{
			Open: func(ctx context.Context, o queue.Options) (*queue.Store, error) {
				o.Path = path
				return queue.Open(ctx, o)
			},
			Read: func(ctx context.Context) (*queue.Reader, error) { return queue.OpenReadOnly(ctx, path) },
		}
	})
}
