package web

import (
	"fmt"
	"strings"
	"time"
)

// Levels of a condition; the style sheet gives each a colour and a shape.
const (
	levelGood = "good"
	levelIdle = "idle"
	levelWarn = "warn"
	levelBad  = "bad"
)

// health is the queue in one line: "keeping up: 3 waiting, oldest 4 s".
type health struct {
	Level     string
	Condition string
	Detail    string
}

// healthOf puts the queue into words. Falling behind is a matter of the oldest
// waiting shot, not of their number: a burst that is worked off in time is
// nothing to worry about.
func healthOf(q Queue, behind time.Duration, now time.Time) health {
	h := health{Level: levelGood, Condition: "keeping up"}
	late := q.Waiting > 0 && q.Oldest > behind
	var part []string
	switch {
	case q.Stopped != "":
		h.Level, h.Condition = levelBad, "standing still"
		part = append(part, q.Stopped)
	case late && q.Running == 0:
		h.Level, h.Condition = levelBad, "standing still"
		part = append(part, "nothing is being worked on")
	case late:
		h.Level, h.Condition = levelWarn, "falling behind"
	case q.Waiting+q.Running+q.Retrying == 0:
		h.Level, h.Condition = levelIdle, "idle"
	}
	part = append(part, waitingWords(q))
	if late && q.Running > 0 && q.PerShot > 0 && q.Slots > 0 {
		rounds := (q.Waiting + q.Slots - 1) / q.Slots
		part = append(part, "about "+age(time.Duration(rounds)*q.PerShot)+" of work")
	}
	if q.Running > 0 && h.Level != levelBad {
		part = append(part, fmt.Sprintf("%d running", q.Running))
	}
	if q.Retrying > 0 {
		part = append(part, fmt.Sprintf("%d to be tried again", q.Retrying))
	}
	if h.Level == levelIdle && !q.Last.IsZero() {
		part = append(part, "last shot done "+near(q.Last.In(now.Location()), now))
	}
	h.Detail = strings.Join(part, ", ")
	return h
}

func waitingWords(q Queue) string {
	switch q.Waiting {
	case 0:
		return "none waiting"
	case 1:
		return "1 waiting for " + age(q.Oldest)
	}
	return fmt.Sprintf("%d waiting, oldest %s", q.Waiting, age(q.Oldest))
}
