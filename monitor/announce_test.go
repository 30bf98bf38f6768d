package monitor

import (
	"errors"
	"fmt"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/store"
)

// A store that fails away from the writer, while nothing arrives, ends the daemon too; and the feeds are told, past the
// store, that nothing is counted any more.
func TestFailureIsTold(t *testing.T) {
	cfg := plant(t, twoLines)
	desk, err := Open(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	done, ready := make(chan error, 1), make(chan struct{})
	go func() { done <- desk.Run(t.Context(), ready) }()
	<-ready
	desk.broke(fmt.Errorf("%w: the disk went away", store.ErrStorage))
	select {
	case err = <-done:
	case <-time.After(10 * time.Second):
		t.Fatal("the daemon goes on")
	}
	if !errors.Is(err, store.ErrStorage) {
		t.Error(err)
	}
	told := messages(t, cfg.Feeds[0].Path)
	if len(told) != 1 || told[0].Type != countingStopped || !strings.Contains(told[0].Data.Text, "the disk went away") || told[0].Data.Caution == "" {
		t.Errorf("%+v", told)
	}
	if err := desk.Close(); err != nil {
		t.Error(err)
	}
}

// A disk with less room than declared is told of once.
func TestDiskIsLow(t *testing.T) {
	cfg := plant(t, strings.Replace(twoLines, "[site]\n", "[site]\ndisk_warning = \"9000000GB\"\n", 1))
	desk, err := Open(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	defer desk.Close()
	desk.watchDisk()
	desk.watchDisk()
	st, err := desk.Status()
	if err != nil {
		t.Fatal(err)
	}
	if st.Disk.Free < 0 {
		t.Skip("how much room there is can't be told on this system")
	}
	told := messages(t, cfg.Feeds[0].Path)
	if !st.Disk.Low || len(told) != 1 || told[0].Type != diskLow {
		t.Errorf("%+v, %+v", st.Disk, told)
	}
}
