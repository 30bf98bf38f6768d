package intake

import (
	"bytes"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"steelyard/store"
)

// Keep puts a copy of a held file's content into a folder of the program's own, synced, under
// its SHA-256: no name from outside makes a path. Keeping the same content again does nothing.
// It returns the copy's name.
func Keep(folder string, sha [32]byte, content []byte) (string, error) {
	name := hex.EncodeToString(sha[:])
	path := filepath.Join(folder, name)
	if old, err := os.ReadFile(path); err == nil && bytes.Equal(old, content) {
		return name, nil
	} else if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return "", fmt.Errorf("keep a held file: %w", err)
	}
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return "", fmt.Errorf("keep a held file: %w", err)
	}
	file, err := os.CreateTemp(folder, ".keep-*")
	if err != nil {
		return "", fmt.Errorf("keep a held file: %w", err)
	}
	_, err = file.Write(content)
	if err == nil {
		err = file.Sync()
	}
	if err = errors.Join(err, file.Close()); err == nil {
		err = os.Rename(file.Name(), path)
	}
	if err != nil {
		return "", errors.Join(fmt.Errorf("keep a held file: %w", err), os.Remove(file.Name()))
	}
	return name, store.SyncFolder(folder)
}
