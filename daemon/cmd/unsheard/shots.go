package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"unsheard/config"
	"unsheard/daemon"
	"unsheard/queue"
)

func shotsCommand() *cobra.Command {
	var path, since, until string
	var states []string
	var asJSON bool
	f := queue.Filter{}
	c := &cobra.Command{
		Use:   "shots",
		Short: "list and filter the shots of the ledger",
		Long: `Reads the ledger beside the running service, or without it. The latest shots come
first. States: waiting, held, paired, running, done, failed, quarantined, lone.`,
		Example: `  unsheard shots --config unsheard.toml --state quarantined,held --since 24h`,
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			if err := fillFilter(&f, states, since, until, time.Now()); err != nil {
				return err
			}
			shots, err := readShots(cmd, path, f)
			if err != nil {
				return err
			}
			if asJSON {
				if shots == nil {
					shots = []queue.Shot{}
				}
				return printJSON(cmd.OutOrStdout(), shots)
			}
			return printShots(cmd.OutOrStdout(), shots)
		},
	}
	fl := c.Flags()
	fl.StringVar(&path, "config", "unsheard.toml", "configuration file")
	fl.StringVar(&f.Station, "station", "", "only this station")
	fl.StringSliceVar(&states, "state", nil, "only these states")
	fl.StringVar(&f.Verdict, "verdict", "", "only this verdict: good, doubtful or unusable")
	fl.StringVar(&f.Text, "name", "", "only names that contain this")
	fl.StringVar(&since, "since", "", "only shots taken since: 2026-03-14T09:00:00Z, 2026-03-14, or how long ago, 24h")
	fl.StringVar(&until, "until", "", "only shots taken before")
	fl.IntVar(&f.Limit, "limit", 100, "at most so many")
	fl.BoolVar(&asJSON, "json", false, "print JSON")
	return c
}

func fillFilter(f *queue.Filter, states []string, since, until string, now time.Time) (err error) {
	for _, s := range states {
		known := false
		for _, k := range queue.States() {
			known = known || string(k) == s
		}
		if !known {
			return fmt.Errorf("--state %q: no such state, known are %v", s, queue.States())
		}
		f.States = append(f.States, queue.State(s))
	}
	if f.Since, err = parseWhen("--since", since, now); err != nil {
		return err
	}
	f.Until, err = parseWhen("--until", until, now)
	return err
}

// parseWhen reads a time, a day, or how long ago.
func parseWhen(flag, s string, now time.Time) (time.Time, error) {
	if s == "" {
		return time.Time{}, nil
	}
	for _, layout := range []string{time.RFC3339Nano, "2006-01-02T15:04:05", "2006-01-02 15:04:05", time.DateOnly} {
		if t, err := time.ParseInLocation(layout, s, time.Local); err == nil {
			return t, nil
		}
	}
	if d, err := time.ParseDuration(s); err == nil && d >= 0 {
		return now.Add(-d), nil
	}
	return time.Time{}, fmt.Errorf("%s %q: write a time like 2026-03-14T09:00:00Z, a day like 2026-03-14, or how long ago like 24h", flag, s)
}

func readShots(cmd *cobra.Command, path string, f queue.Filter) ([]queue.Shot, error) {
	cfg, err := config.Load(path)
	if err != nil {
		return nil, err
	}
	ledger := daemon.LedgerPath(cfg)
	if _, err := os.Stat(ledger); errors.Is(err, os.ErrNotExist) {
		return nil, fmt.Errorf("no ledger at %q yet: start unsheard watch first, or check campaign.state", ledger)
	}
	r, err := queue.OpenReadOnly(cmd.Context(), ledger)
	if err != nil {
		return nil, err
	}
	defer r.Close()
	return r.Shots(cmd.Context(), f)
}

func printShots(w io.Writer, shots []queue.Shot) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, "ID\tTAKEN (UTC)\tSTATION\tSHOT\tSTATE\tVERDICT\tREASON")
	for _, s := range shots {
		fmt.Fprintf(t, "%d\t%s\t%s\t%s\t%s\t%s\t%s\n", s.ID, s.Taken.UTC().Format("2006-01-02 15:04:05.000"),
			s.Station, s.Name, s.State, s.Verdict, firstReason(s))
	}
	return t.Flush()
}

// firstReason is why a shot is in its state or has its verdict.
func firstReason(s queue.Shot) string {
	if s.Reason != "" {
		return s.Reason
	}
	var sum struct {
		Reasons []struct{ Text, Remedy string }
	}
	if json.Unmarshal(s.Summary, &sum) == nil && len(sum.Reasons) > 0 {
		return sum.Reasons[0].Text + ": " + sum.Reasons[0].Remedy
	}
	return ""
}
