package storage

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// volumeFolders returns the numbers of the volume folders that are there, in order.
func volumeFolders(folder string) ([]uint64, error) {
	entries, err := os.ReadDir(folder)
	if err != nil {
		return nil, err
	}
	var numbers []uint64
	for _, entry := range entries {
		var number uint64
		if _, err := fmt.Sscanf(entry.Name(), "volume-%d", &number); err == nil && volume.FolderName(number) == entry.Name() {
			numbers = append(numbers, number)
		}
	}
	return numbers, nil
}

// adopt takes up a volume that was made just before a crash kept it out of the manifest: it is the next one, and empty. Any other volume
// that the manifest does not know means that the manifest is older than the volumes, and is refused.
func (w *Writer) adopt(rows []volume.Info) ([]volume.Info, error) {
	numbers, err := volumeFolders(w.options.Folder)
	if err != nil {
		return nil, err
	}
	known := uint64(len(rows))
	for _, number := range numbers {
		if number >= 1 && number <= known {
			continue
		}
		folder := filepath.Join(w.options.Folder, volume.FolderName(number))
		if number != known+1 {
			return nil, damage.InFile(folder, "the manifest does not know this volume")
		}
		v, err := volume.OpenForWriting(folder, w.options.volume())
		if err != nil {
			return nil, err
		}
		info := v.Info()
		if err := v.Close(); err != nil {
			return nil, err
		}
		if info.Records > 0 || info.Number != number {
			return nil, damage.InFile(folder, "the manifest does not know this volume, but it holds %d records", info.Records)
		}
		if err := w.catalogue.PutVolume(info); err != nil {
			return nil, errors.Join(err, fmt.Errorf("take up volume %d", number))
		}
		return append(rows, info), nil
	}
	return rows, nil
}
