//go:build !linux

package disk

import "os"

func syncContent(f *os.File) error { return f.Sync() }

// Forget does nothing where the page cache cannot be told to drop a file.
func Forget(*os.File) error { return nil }
