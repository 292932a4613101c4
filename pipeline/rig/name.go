package rig

import (
	"fmt"
	"strconv"
	"strings"
	"time"
)

// Name fills a file name pattern with strptime fields: %Y %m %d %H %M %S %f
// (microseconds), %j (day of the year), %% and {shot}. The time is written in
// UTC.
func Name(pattern string, at time.Time, shot int64) (string, error) {
	at = at.UTC()
	pattern = strings.ReplaceAll(pattern, "{shot}", strconv.FormatInt(shot, 10))
	layout := map[byte]string{'Y': "2006", 'm': "01", 'd': "02", 'H': "15", 'M': "04", 'S': "05", 'j': "002"}
	var b strings.Builder
	for i := 0; i < len(pattern); i++ {
		if pattern[i] != '%' {
			b.WriteByte(pattern[i])
			continue
		}
		i++
		switch {
		case i == len(pattern):
			return "", fmt.Errorf("file name pattern %q ends in a lone %%", pattern)
		case pattern[i] == '%':
			b.WriteByte('%')
		case pattern[i] == 'f':
			fmt.Fprintf(&b, "%06d", at.Nanosecond()/1000)
		case layout[pattern[i]] != "":
			b.WriteString(at.Format(layout[pattern[i]]))
		default:
			return "", fmt.Errorf("file name pattern %q: field %%%c is not one of %%Y %%m %%d %%H %%M %%S %%f %%j %%%%", pattern, pattern[i])
		}
	}
	return b.String(), nil
}
