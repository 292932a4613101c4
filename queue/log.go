package queue

import (
	"context"
	"log/slog"

	"go.uber.org/zap"
	"go.uber.org/zap/zapcore"
)

// slogTo lets River, which logs by slog, log into l, warnings and errors only:
// what River finds worth an info, the ledger has already.
func slogTo(l *zap.Logger) *slog.Logger { return slog.New(zapHandler{l.Named("river")}) }

type zapHandler struct{ l *zap.Logger }

func (h zapHandler) Enabled(_ context.Context, level slog.Level) bool { return level >= slog.LevelWarn }

func (h zapHandler) Handle(_ context.Context, r slog.Record) error {
	level := zapcore.WarnLevel
	if r.Level >= slog.LevelError {
		level = zapcore.ErrorLevel
	}
	fields := make([]zap.Field, 0, r.NumAttrs())
	r.Attrs(func(a slog.Attr) bool {
		fields = append(fields, zap.Any(a.Key, a.Value.Any()))
		return true
	})
	h.l.Log(level, r.Message, fields...)
	return nil
}

func (h zapHandler) WithAttrs(attrs []slog.Attr) slog.Handler {
	l := h.l
	for _, a := range attrs {
		l = l.With(zap.Any(a.Key, a.Value.Any()))
	}
	return zapHandler{l}
}

func (h zapHandler) WithGroup(name string) slog.Handler { return zapHandler{h.l.Named(name)} }
