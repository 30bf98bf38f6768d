package feed

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"steelyard/store"
)

// File is a feed of kind "file": JSON lines, one message a line, each synced to the disk
// before it counts as delivered. The file may be moved away at any time; a new one is begun.
type File struct {
	Path string // absolute
}

// Deliver appends the messages and syncs them.
func (f *File) Deliver(_ context.Context, messages [][]byte) (err error) {
	if err := os.MkdirAll(filepath.Dir(f.Path), 0o755); err != nil {
		return fmt.Errorf("feed file: %w", err)
	}
	_, statErr := os.Stat(f.Path)
	file, err := os.OpenFile(f.Path, os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return fmt.Errorf("feed file: %w", err)
	}
	defer func() { err = errors.Join(err, file.Close()) }()
	end, err := endOfLines(file)
	if err != nil {
		return fmt.Errorf("feed file %s: %w", f.Path, err)
	}
	// What a crash left behind the last whole line was never delivered: it goes, or it
	// would spoil the line that follows.
	if err := file.Truncate(end); err != nil {
		return fmt.Errorf("feed file: %w", err)
	}
	var lines bytes.Buffer
	for _, m := range messages {
		lines.Write(m)
		lines.WriteByte('\n')
	}
	if _, err := file.WriteAt(lines.Bytes(), end); err != nil {
		return fmt.Errorf("feed file: %w", err)
	}
	if err := file.Sync(); err != nil {
		return fmt.Errorf("feed file: %w", err)
	}
	if errors.Is(statErr, os.ErrNotExist) {
		return store.SyncFolder(filepath.Dir(f.Path))
	}
	return nil
}

// endOfLines is the offset behind the last newline.
func endOfLines(file *os.File) (int64, error) {
	size, err := file.Seek(0, io.SeekEnd)
	if err != nil {
		return 0, err
	}
	piece := make([]byte, 64<<10)
	for size > 0 {
		from := max(size-int64(len(piece)), 0)
		n, err := file.ReadAt(piece[:size-from], from)
		if err != nil && err != io.EOF {
			return 0, err
		}
		if i := bytes.LastIndexByte(piece[:n], '\n'); i >= 0 {
			return from + int64(i) + 1, nil
		}
		size = from
	}
	return 0, nil
}
