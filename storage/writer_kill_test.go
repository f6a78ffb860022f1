package storage

import (
	"bufio"
	"bytes"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"example.com/admit/storage/volume"
)

// process is a child that records, and the ledger of what it was told.
type process struct {
	command *exec.Cmd
	done    chan struct{} // closed when its output has ended
	begun   chan struct{} // closed when it is about to open the store
	errors  bytes.Buffer

	mu     sync.Mutex
	ledger map[string]Result
	order  []string
	odd    []string // lines that should not be
	more   chan struct{}
}

func start(t *testing.T, folder string, volumeBytes int64, generation int) *process {
	t.Helper()
	p := &process{
		command: exec.Command(os.Args[0]), done: make(chan struct{}), begun: make(chan struct{}),
		ledger: make(map[string]Result), more: make(chan struct{}, 1),
	}
	p.command.Env = append(os.Environ(), fmt.Sprintf("%s=record %s %d %d", childVariable, folder, volumeBytes, generation))
	p.command.Stderr = &p.errors
	out, err := p.command.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := p.command.Start(); err != nil {
		t.Fatal(err)
	}
	go func() {
		defer close(p.done)
		for lines := bufio.NewScanner(out); lines.Scan(); {
			p.note(lines.Text())
		}
	}()
	return p
}

func (p *process) note(line string) {
	var id string
	var r Result
	switch {
	case line == "begin":
		close(p.begun)
	case strings.HasPrefix(line, "recorded "):
		if _, err := fmt.Sscanf(line, "recorded %s %d %d", &id, &r.Sequence, &r.Volume); err == nil {
			p.mu.Lock()
			p.ledger[id] = r
			p.order = append(p.order, id)
			p.mu.Unlock()
			select {
			case p.more <- struct{}{}:
			default:
			}
			return
		}
		fallthrough
	default:
		p.mu.Lock()
		p.odd = append(p.odd, line)
		p.mu.Unlock()
	}
}

// waitFor waits until that many were acknowledged.
func (p *process) waitFor(t *testing.T, n int) {
	t.Helper()
	deadline := time.After(20 * time.Second)
	for {
		p.mu.Lock()
		have := len(p.ledger)
		p.mu.Unlock()
		if have >= n {
			return
		}
		select {
		case <-p.more:
		case <-p.done:
			_ = p.command.Wait()
			t.Fatalf("the child ended by itself: %s %q", p.errors.String(), p.odd)
		case <-deadline:
			t.Fatalf("only %d acknowledgements in 20 s: the run proves nothing", have)
		}
	}
}

// kill ends the child as a power switch would end a program, and returns what it had been told.
func (p *process) kill(t *testing.T) map[string]Result {
	t.Helper()
	if err := p.command.Process.Signal(syscall.SIGKILL); err != nil {
		t.Fatal(err)
	}
	<-p.done
	if err := p.command.Wait(); err == nil {
		t.Error("the child ended before it was killed")
	}
	for _, line := range p.odd {
		t.Errorf("the child said %q", line)
	}
	return p.ledger
}

// TestKill kills a recording process at random moments, again and again on the same store. After each time everything it was told is recorded is
// there, exactly once, with the same content; what it was not told is whole or absent; the counter equals the number of records; all volumes
// verify. Half of the rounds roll over all the time.
func TestKill(t *testing.T) {
	t.Parallel()
	kills := 25
	if testing.Short() {
		kills = 5
	}
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 0))
	for _, volumeBytes := range []int64{64 << 20, 200 << 10} {
		folder := t.TempDir()
		everything := make(map[string]Result)
		for generation := range (kills + 1) / 2 {
			p := start(t, folder, volumeBytes, generation)
			p.waitFor(t, 100)
			time.Sleep(time.Duration(random.IntN(30_000)) * time.Microsecond)
			told := p.kill(t)
			w, err := OpenWriter(WriterOptions{Folder: folder, Revision: "parent", VolumeBytes: volumeBytes})
			if err != nil {
				t.Fatalf("generation %d: %v", generation, err)
			}
			for id, r := range told {
				everything[id] = r
				holds(t, w, id, r)
			}
			consistent(t, w)
			closeWriter(t, w)
			if t.Failed() {
				t.Fatalf("generation %d, volumes of %d bytes", generation, volumeBytes)
			}
		}
		w, err := OpenWriter(WriterOptions{Folder: folder, Revision: "parent", VolumeBytes: volumeBytes})
		if err != nil {
			t.Fatal(err)
		}
		for id, r := range everything {
			holds(t, w, id, r)
		}
		verified(t, w)
		t.Logf("volumes of %d bytes: %d acknowledged, %d volumes", volumeBytes, len(everything), len(w.Volumes()))
		closeWriter(t, w)
	}
}

// consistent reads every record of the store: all different, each what its id says, as many as the counter counts.
func consistent(t *testing.T, w *Writer) {
	t.Helper()
	ids := make(map[string]bool)
	last := uint64(0)
	for _, s := range w.Volumes() {
		v, err := w.Volume(s.Number)
		if err != nil {
			t.Fatal(err)
		}
		for from := uint64(0); ; {
			records, err := v.Records(from, 500, volume.Ascending)
			if err != nil {
				t.Fatal(err)
			}
			if len(records) == 0 {
				break
			}
			for _, r := range records {
				id := string(r.Terms[len(r.Terms)-1].Value)
				payload, samples, hash := content(id)
				if ids[id] || r.Sequence <= last || !bytes.Equal(r.Payload, payload) || r.ContentHash != hash || len(r.Samples) != len(samples) {
					t.Errorf("record %d of %q is there twice, or out of order, or in part", r.Sequence, id)
				}
				ids[id], last = true, r.Sequence
			}
			from = last + 1
		}
	}
	if got := total(t, w); got != int64(len(ids)) {
		t.Errorf("counted %d, there are %d records", got, len(ids))
	}
}

// TestKillAtCreation kills the process within 50 ms of its first touch of an empty folder: the store opens afterwards, with what was told.
func TestKillAtCreation(t *testing.T) {
	t.Parallel()
	kills := 30
	if testing.Short() {
		kills = 5
	}
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 1))
	opened := 0
	for range kills {
		folder := t.TempDir()
		p := start(t, folder, 100<<10, 0)
		<-p.begun
		time.Sleep(time.Duration(random.IntN(50_000)) * time.Microsecond)
		told := p.kill(t)
		if len(told) > 0 {
			opened++
		}
		w, err := OpenWriter(WriterOptions{Folder: folder, Revision: "parent"})
		if err != nil {
			t.Fatalf("open after the kill: %v", err)
		}
		for id, r := range told {
			holds(t, w, id, r)
		}
		consistent(t, w)
		holds(t, w, "after", submit(t, w, "after"))
		verified(t, w)
		closeWriter(t, w)
	}
	t.Logf("%d of %d had recorded something", opened, kills)
}

// fillChild runs one of the children that fill a disk.
func fillChild(t *testing.T, what string, attributes *syscall.SysProcAttr) {
	t.Helper()
	cycles := 20
	if testing.Short() {
		cycles = 3
	}
	command := exec.Command(os.Args[0])
	command.Env = append(os.Environ(), fmt.Sprintf("%s=%s %d %s", childVariable, what, cycles, t.TempDir()))
	command.SysProcAttr = attributes
	out, err := command.CombinedOutput()
	if err != nil {
		t.Errorf("%v: %s", err, out)
	}
	t.Logf("%s", out)
}

// TestFileLimit meets the limit on file sizes, which bbolt reports without its number when it resizes.
func TestFileLimit(t *testing.T) {
	t.Parallel()
	fillChild(t, "fill-limit", nil)
}

// TestFullDisk fills a small file system in a name space of its own.
func TestFullDisk(t *testing.T) {
	t.Parallel()
	probe := exec.Command("unshare", "--user", "--map-root-user", "--mount", "true")
	if err := probe.Run(); err != nil {
		t.Skip("skipped: needs user and mount name spaces (unshare of Debian package util-linux)")
	}
	id := []syscall.SysProcIDMap{{ContainerID: 0, HostID: os.Getuid(), Size: 1}}
	gid := []syscall.SysProcIDMap{{ContainerID: 0, HostID: os.Getgid(), Size: 1}}
	fillChild(t, "fill-tmpfs", &syscall.SysProcAttr{
		Cloneflags: syscall.CLONE_NEWUSER | syscall.CLONE_NEWNS, UidMappings: id, GidMappings: gid,
	})
}
