//go:build !linux

package store

// initialMap stays small: on some systems the file takes that size at once.
const initialMap = 0

// refuseNetwork can't tell a network file system here; README.md says not to use one.
func refuseNetwork(string) error { return nil }

// Free can't be told here.
func Free(string) int64 { return -1 }
