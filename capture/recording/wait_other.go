//go:build !unix

package recording

import (
	"os"
	"time"
)

// waiter does nothing here: a read of a pipe waits for bytes.
type waiter struct{}

func newWaiter(*os.File) *waiter { return nil }

func (*waiter) readable(time.Duration) bool { return true }
