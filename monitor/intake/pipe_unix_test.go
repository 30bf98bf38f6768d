//go:build unix

package intake

import (
	"syscall"
	"testing"
)

func makePipe(t *testing.T, path string) {
	t.Helper()
	if err := syscall.Mkfifo(path, 0o644); err != nil {
		t.Fatal(err)
	}
}
