package export

import (
	"context"
	"crypto/rand"
	"encoding/hex"
	"fmt"
	"strconv"
	"strings"
)

// Publish writes the result folder dir, whole or not at all; see the package
// comment. The folder that dir stands in must exist. Errors carry the
// system's reason for errors.Is, for example syscall.ENOSPC; see [Retryable].
func Publish(ctx context.Context, dir string, r Result, o Options) error {
	o.fill()
	from, err := r.check()
	if err == nil {
		dir, err = checkPlace(dir, from)
	}
	if err == nil {
		err = publish(ctx, dir, &r, from, &o)
	}
	if err != nil {
		return fmt.Errorf("publish %s: %w", dir, err)
	}
	return nil
}

func publish(ctx context.Context, dir string, r *Result, from origin, o *Options) error {
	s := newSwap(dir, o)
	if !s.wanted(r) {
		return nil
	}
	if err := s.build(ctx, r, from, o); err != nil {
		// On a full disk this makes room again; what cannot be removed now
		// is left to Sweep.
		_ = o.disk.removeAll(s.partial)
		return err
	}
	if !s.wanted(r) { // a finer result came while this one was written
		return s.discard(ctx, s.ready)
	}
	return s.swap(ctx)
}

// token is unused by any other process and attempt, and tells when it was
// made: milliseconds since 1970 in base 36, then 48 random bits, then what is
// left of the attempt's name.
func token(o *Options) string {
	var b [6]byte
	rand.Read(b[:]) // never fails
	t := strconv.FormatInt(o.now().UnixMilli(), 36) + "-" + hex.EncodeToString(b[:])
	for _, c := range strings.ToLower(o.Attempt) {
		if len(t) < 38 && (c >= 'a' && c <= 'z' || c >= '0' && c <= '9') {
			t += string(c)
		}
	}
	return t
}
