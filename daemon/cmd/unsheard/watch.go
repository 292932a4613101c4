package main

import (
	"fmt"
	"io"
	"os"
	"path/filepath"

	"github.com/DeRuina/timberjack"
	"github.com/prometheus/client_golang/prometheus"
	"github.com/spf13/cobra"
	"go.uber.org/zap"
	"go.uber.org/zap/zapcore"

	"unsheard/config"
	"unsheard/daemon"
	"unsheard/pipeline"
)

func watchCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "watch",
		Short: "the service: watch, pair, reconstruct, until it is stopped",
		Long: `Runs until Ctrl-C or a stop signal. Then no new shot is started, running ones may
finish for work.stop, and what was interrupted goes on at the next start.

The log goes to log.file as JSON, rotated, and to the terminal in plain words.`,
		Example: `  unsheard watch --config unsheard.toml`,
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			cfg, err := config.Load(path)
			if err != nil {
				return err
			}
			logger, done, err := newLogger(&cfg.Log, cmd.ErrOrStderr())
			if err != nil {
				return err
			}
			defer done()
			d, err := daemon.New(cmd.Context(), daemon.Options{Config: cfg, Registry: prometheus.NewRegistry(),
				Logger: logger, Version: pipeline.Version,
				Started: func(page string) { fmt.Fprintln(cmd.OutOrStdout(), "page:", page) }})
			if err != nil {
				return err
			}
			return d.Run(cmd.Context())
		},
	}
	c.Flags().StringVar(&path, "config", "unsheard.toml", "configuration file")
	return c
}

// newLogger writes JSON to a rotated file and plain words to w.
func newLogger(c *config.Log, w io.Writer) (*zap.Logger, func(), error) {
	level, err := zapcore.ParseLevel(c.Level)
	if err != nil {
		return nil, nil, fmt.Errorf("log.level: %w", err)
	}
	if err := os.MkdirAll(filepath.Dir(c.File), 0o755); err != nil {
		return nil, nil, fmt.Errorf("log.file: %w", err)
	}
	file := &timberjack.Logger{Filename: c.File, MaxSize: max(1, int(int64(c.MaxSize)>>20)), MaxBackups: c.Keep}
	js := zap.NewProductionEncoderConfig()
	js.EncodeTime = zapcore.RFC3339NanoTimeEncoder
	plain := zap.NewDevelopmentEncoderConfig()
	plain.EncodeTime = zapcore.TimeEncoderOfLayout("15:04:05.000")
	plain.EncodeCaller = nil
	core := zapcore.NewTee(
		zapcore.NewCore(zapcore.NewJSONEncoder(js), zapcore.AddSync(file), level),
		zapcore.NewCore(zapcore.NewConsoleEncoder(plain), zapcore.Lock(zapcore.AddSync(w)), level))
	logger := zap.New(core)
	return logger, func() {
		_ = logger.Sync() // a terminal cannot be synced
		_ = file.Close()
	}, nil
}
