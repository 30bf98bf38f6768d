//go:build unix

package monitor

import (
	"syscall"
	"testing"
)

// pipe makes a pipe that nobody writes into: opening it for reading would wait for ever.
func pipe(t *testing.T, path string) {
	t.Helper()
	if err := syscall.Mkfifo(path, 0o644); err != nil {
		t.Fatal(err)
	}
}
