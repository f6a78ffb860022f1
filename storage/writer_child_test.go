package storage

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"sync"
	"time"

	"golang.org/x/sys/unix"

	"example.com/admit/storage/volume"
)

// runChild is the life of a re-executed test binary: what says which, and its arguments follow.
func runChild(what string) int {
	name, arguments, _ := strings.Cut(what, " ")
	var err error
	switch name {
	case "record":
		err = childRecord(strings.Fields(arguments))
	case "fill-limit", "fill-tmpfs":
		var cycles int
		number, folder, _ := strings.Cut(arguments, " ")
		if cycles, err = strconv.Atoi(number); err != nil {
			break
		}
		if name == "fill-limit" {
			err = childFill(folder, limitFiles{}, cycles)
		} else {
			err = childTmpfs(folder, cycles)
		}
	default:
		err = fmt.Errorf("unknown child %q", what)
	}
	if err != nil {
		fmt.Fprintln(os.Stderr, err)
		return 1
	}
	return 0
}

// childRecord opens the store and records from eight goroutines until it is killed, telling of each acknowledgement on standard output.
func childRecord(arguments []string) error {
	if len(arguments) != 3 {
		return fmt.Errorf("folder, volume bytes and generation wanted, got %q", arguments)
	}
	volumeBytes, err := strconv.ParseInt(arguments[1], 10, 64)
	if err != nil {
		return err
	}
	var out sync.Mutex
	say := func(line string) {
		out.Lock()
		defer out.Unlock()
		fmt.Println(line)
	}
	say("begin")
	w, err := OpenWriter(WriterOptions{Folder: arguments[0], Revision: "child", VolumeBytes: volumeBytes})
	if err != nil {
		return err
	}
	var group sync.WaitGroup
	for i := range 8 {
		group.Go(func() {
			for n := 0; err == nil; n++ {
				id := fmt.Sprintf("%s-%d-%d", arguments[2], i, n)
				r, submitErr := w.Submit(context.Background(), submission(id))
				if submitErr != nil {
					say("error " + submitErr.Error())
					return
				}
				say(fmt.Sprintf("recorded %s %d %d", id, r.Sequence, r.Volume))
			}
		})
	}
	group.Wait()
	return errors.New("recording ended by itself")
}

// squeezer takes the room to store away and gives it back.
type squeezer interface {
	squeeze(folder string) error
	release(folder string) error
}

// limitFiles forbids any file of the store to grow beyond what the longest has now: the resize then fails.
type limitFiles struct{}

func (limitFiles) squeeze(folder string) error {
	longest := int64(0)
	err := filepath.Walk(folder, func(_ string, info os.FileInfo, err error) error {
		if err == nil && !info.IsDir() {
			longest = max(longest, info.Size())
		}
		return err
	})
	if err != nil {
		return err
	}
	return setFileLimit(uint64(longest))
}

func (limitFiles) release(string) error { return setFileLimit(^uint64(0)) }

func setFileLimit(bytes uint64) error {
	var limit unix.Rlimit
	if err := unix.Getrlimit(unix.RLIMIT_FSIZE, &limit); err != nil {
		return err
	}
	limit.Cur = min(bytes, limit.Max)
	return unix.Setrlimit(unix.RLIMIT_FSIZE, &limit)
}

// ballast fills the disk up to a small rest.
type ballast struct{}

func (ballast) squeeze(folder string) error {
	var stat unix.Statfs_t
	if err := unix.Statfs(folder, &stat); err != nil {
		return err
	}
	room := int64(stat.Bavail)*stat.Bsize - 200<<10
	if room <= 0 {
		return nil
	}
	return os.WriteFile(folder+".ballast", make([]byte, room), 0o600)
}

func (ballast) release(folder string) error { return os.Remove(folder + ".ballast") }

// childTmpfs mounts a small file system in a name space of its own and fills it.
func childTmpfs(folder string, cycles int) error {
	if err := unix.Mount("none", "/", "", unix.MS_REC|unix.MS_PRIVATE, ""); err != nil {
		return err
	}
	if err := unix.Mount("tmpfs", folder, "tmpfs", 0, "size=24m"); err != nil {
		return err
	}
	return childFill(filepath.Join(folder, "store"), ballast{}, cycles)
}

// childFill fills the store and makes room again, several times. While there is none, nothing is acknowledged and everything recorded can be
// read; as soon as there is, recording goes on by itself.
func childFill(folder string, room squeezer, cycles int) error {
	w, err := OpenWriter(WriterOptions{Folder: folder, Revision: "child", VolumeBytes: 1 << 30})
	if err != nil {
		return err
	}
	recorded := make(map[string]Result)
	submitted := 0
	record := func() error {
		id := fmt.Sprintf("entry %d", submitted)
		submitted++
		r, err := w.Submit(context.Background(), bulky(id))
		if err == nil {
			recorded[id] = r
		}
		return err
	}
	for cycle := range cycles {
		if err := record(); err != nil {
			return fmt.Errorf("cycle %d, with room: %w", cycle, err)
		}
		if err := room.squeeze(folder); err != nil {
			return err
		}
		for tries := 0; ; tries++ {
			if err := record(); errors.Is(err, ErrFull) {
				break
			} else if err != nil || tries > 2000 {
				return fmt.Errorf("cycle %d, try %d, without room: %w", cycle, tries, err)
			}
		}
		for range 3 {
			if err := record(); !errors.Is(err, ErrFull) && err != nil {
				return fmt.Errorf("cycle %d, still without room: %w", cycle, err)
			}
		}
		if err := allThere(w, recorded); err != nil {
			return fmt.Errorf("cycle %d, without room: %w", cycle, err)
		}
		if err := room.release(folder); err != nil {
			return err
		}
		began := time.Now()
		for err := record(); err != nil; err = record() {
			if time.Since(began) > 5*time.Second {
				return fmt.Errorf("cycle %d, 5 s after there is room again: %w", cycle, err)
			}
		}
	}
	if err := w.Close(); err != nil {
		return err
	}
	if w, err = OpenWriter(WriterOptions{Folder: folder}); err != nil {
		return err
	}
	if err := allThere(w, recorded); err != nil {
		return err
	}
	v, err := w.Volume(1)
	if err != nil {
		return err
	}
	report, err := v.Verify(context.Background())
	fmt.Printf("%d recorded of %d submitted, %d orphans\n", len(recorded), submitted, report.Orphans)
	if report.Records != uint64(len(recorded)) {
		err = fmt.Errorf("%d records, %d were acknowledged", report.Records, len(recorded))
	}
	return errors.Join(err, report.Err(), w.Close())
}

// bulky is a submission of 60 kB, so that a disk fills soon.
func bulky(id string) Submission {
	block := make([]byte, 60_000)
	_, _ = rand.NewChaCha8(sha256.Sum256([]byte(id))).Read(block)
	return Submission{ID: []byte(id), ContentHash: sha256.Sum256([]byte(id)), Prepare: func(uint64, Lookup) (volume.Entry, error) {
		return volume.Entry{TestedAt: tested, Payload: []byte(id), Samples: []volume.SampleBlock{{Bytes: block}},
			Deltas: []volume.Delta{{Key: []byte("total"), Values: []int64{1}}}}, nil
	}}
}

func allThere(w *Writer, recorded map[string]Result) error {
	for id, r := range recorded {
		v, err := w.Volume(r.Volume)
		if err != nil {
			return err
		}
		record, err := v.Record(r.Sequence)
		if err != nil || string(record.Payload) != id {
			return fmt.Errorf("%s: %q, %w", id, record.Payload, err)
		}
		if _, err := v.Samples(r.Sequence); err != nil {
			return fmt.Errorf("%s: %w", id, err)
		}
	}
	return nil
}
