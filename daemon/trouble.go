package daemon

import (
	"sync"

	"go.uber.org/zap"
)

// trouble says once in the log what keeps the shots of a station waiting, and
// once that it is over, however many shots meet it.
type trouble struct {
	logger *zap.Logger
	mu     sync.Mutex // guards now
	now    map[string]string
}

func newTrouble(l *zap.Logger) *trouble { return &trouble{logger: l, now: map[string]string{}} }

// note takes down what a task of the station met; nil is nothing. kind tells
// troubles apart that come and go on their own.
func (t *trouble) note(station, kind string, err error) {
	key, text := station+"\x00"+kind, ""
	if err != nil {
		text = err.Error()
	}
	t.mu.Lock()
	before := t.now[key]
	t.now[key] = text
	t.mu.Unlock()
	// A free space or a time in the text changes with every look: what
	// matters is that there is trouble.
	switch {
	case before == "" && text != "":
		t.logger.Warn("shots must wait", zap.String("station", station), zap.String("kind", kind), zap.Error(err))
	case before != "" && text == "":
		t.logger.Info("shots go on", zap.String("station", station), zap.String("kind", kind), zap.String("after", before))
	}
}
