package frame

import (
	"errors"
	"fmt"
	"slices"
	"strings"
)

// needs lists what a directive is worth nothing without.
var needs = []struct {
	name string
	one  []string
}{
	{"%f", []string{"%S", "%s"}}, {"%S", []string{"%M"}}, {"%M", []string{"%H"}},
	{"%H", []string{"%d", "%j"}}, {"%z", []string{"%H"}},
	{"%d", []string{"%m", "%b"}}, {"%m", []string{"%d"}}, {"%b", []string{"%d"}},
	{"%d", []string{"%Y", "%y"}}, {"%j", []string{"%Y", "%y"}},
	{"%Y", []string{"%d", "%j"}}, {"%y", []string{"%d", "%j"}},
}

// rivals lists directives that say the same.
var rivals = [][]string{{"%Y", "%y", "%s"}, {"%m", "%b", "%j", "%s"}, {"%d", "%j", "%s"},
	{"%H", "%s"}, {"%M", "%s"}, {"%S", "%s"}, {"%z", "%s"}}

// complete refuses a pattern that gives neither a full time nor a shot.
func complete(list []piece) error {
	has := func(names ...string) []string {
		return slices.DeleteFunc(slices.Clone(names), func(n string) bool {
			return !slices.Contains(list, piece{name: n})
		})
	}
	for _, r := range rivals {
		if both := has(r...); len(both) > 1 {
			return fmt.Errorf("%s and %s contradict each other: keep one", both[0], both[1])
		}
	}
	for _, n := range needs {
		if len(has(n.name)) > 0 && len(has(n.one...)) == 0 {
			return fmt.Errorf("%s needs %s beside it; to skip a part of the name write {*}", n.name, strings.Join(n.one, " or "))
		}
	}
	if len(has("{shot}", "%s", "%H")) > 0 {
		return nil
	}
	if len(has("%d", "%j")) > 0 {
		return errors.New("it has a date but no time of day: add %H%M%S, or {shot}")
	}
	return errors.New("it has no date: it needs a date and time such as %Y%m%d %H%M%S, or {shot}")
}
