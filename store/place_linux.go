package store

import (
	"fmt"

	"golang.org/x/sys/unix"
)

// initialMap is how much of the file is mapped at once, so that growth does not wait for
// readers.
const initialMap = 256 << 20

// refuseNetwork refuses a folder on a network file system: bbolt needs a lock and a shared
// map that such systems do not keep.
func refuseNetwork(folder string) error {
	var st unix.Statfs_t
	if err := unix.Statfs(folder, &st); err != nil {
		return fmt.Errorf("%w: %s: %w", ErrStorage, folder, err)
	}
	switch int64(st.Type) & 0xffffffff {
	case unix.NFS_SUPER_MAGIC, unix.SMB_SUPER_MAGIC, unix.CIFS_SUPER_MAGIC, unix.SMB2_SUPER_MAGIC, unix.V9FS_MAGIC, unix.CEPH_SUPER_MAGIC:
		return fmt.Errorf("the state folder %s is on a network file system, where the store is not safe; put `state` on a disk of this machine", folder)
	}
	return nil
}

// Free is how many bytes the account may still write on the disk of a folder; -1 where that can't be told.
func Free(folder string) int64 {
	var st unix.Statfs_t
	if err := unix.Statfs(folder, &st); err != nil {
		return -1
	}
	return int64(st.Bavail) * st.Bsize
}
