package rpc

import (
	"log/slog"
	"os"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"google.golang.org/grpc"

	pb "example.com/admit/api/admit/v1"
)

// The certificate is renewed twenty times while inspections run and a watcher watches: no stream is lost, every new handshake sees the
// new one (promise P18).
func TestCertificatesRotateUnderLoad(t *testing.T) {
	var clock steppedClock // of the certificates only: each rotation must be looked for at once
	f, ca, files := newSecureFloor(t, clock.Now, nil)
	mine := ca.pair(client("n1.floor.example"))
	watch, err := pb.NewInspectionServiceClient(f.dialAs(ca, &mine, nil)).WatchInspections(t.Context(), &pb.WatchInspectionsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := watch.Recv(); err != nil { // from here on the watcher counts
		t.Fatal(err)
	}
	stop := make(chan struct{})
	var load sync.WaitGroup
	var inspected atomic.Int64
	steady := f.dialAs(ca, &mine, nil)
	load.Go(func() {
		for {
			select {
			case <-stop:
				return
			default:
			}
			if _, err := inspectAll(t.Context(), steady, newUnit("N1", "TM0000001").messages()); err != nil {
				t.Error("lost under rotation:", err)
				return
			}
			inspected.Add(1)
		}
	})
	seen := map[time.Time]bool{}
	for i := range 20 {
		next := server()
		next.NotAfter = time.Now().Add(time.Duration(i+2) * time.Hour).Truncate(time.Second)
		ca.write(f.dirOf(files), next, ca.pem())
		clock.add(2 * lookEvery)
		conn := f.dialAs(ca, &mine, nil)
		mustRecord(t, conn, newUnit("N1", "TM0000002"))
		conn.Close()
		if got := f.server.o.TLS.Expiry(); !got.Equal(next.NotAfter) {
			t.Fatalf("rotation %d: the certificate in use ends at %v, want %v", i, got, next.NotAfter)
		}
		seen[f.server.o.TLS.Expiry()] = true
	}
	close(stop)
	load.Wait()
	total := inspected.Load() + 20
	if len(seen) != 20 || inspected.Load() == 0 {
		t.Fatalf("%d certificates seen, %d inspections under way meanwhile; want 20 and some", len(seen), inspected.Load())
	}
	for n := int64(0); n < total; {
		m, err := watch.Recv()
		if err != nil {
			t.Fatal("the watch was lost under rotation:", err)
		}
		if m.GetInspection() != nil {
			n++
		}
	}
	attempts, failures := f.server.o.TLS.Loads()
	if attempts != 21 || failures != 0 {
		t.Errorf("%d loads with %d failures, want 21 and 0", attempts, failures)
	}
}

func (f *testFloor) dirOf(files CertificateFiles) string {
	return strings.TrimSuffix(files.Certificate, "/server.pem")
}

// Broken files change nothing but the log and the count, and are taken up once they are mended.
func TestBrokenCertificateFilesLeaveTheOldOnes(t *testing.T) {
	var clock steppedClock
	f, ca, files := newSecureFloor(t, clock.Now, nil)
	mine := ca.pair(client("n1.floor.example"))
	connect := func() *grpc.ClientConn { return f.dialAs(ca, &mine, nil) }
	old := f.server.o.TLS.Expiry()
	good := map[string][]byte{}
	for _, name := range []string{files.Certificate, files.Key, files.CallerCAs} {
		content, err := os.ReadFile(name)
		if err != nil {
			t.Fatal(err)
		}
		good[name] = content
	}
	other := newAuthority(t)
	foreign := other.write(t.TempDir(), server(), other.pem())
	foreignKey, err := os.ReadFile(foreign.Key)
	if err != nil {
		t.Fatal(err)
	}
	for i, c := range []struct {
		name, file string
		content    []byte
	}{
		{"half a certificate", files.Certificate, good[files.Certificate][:200]},
		{"an empty key", files.Key, nil},
		{"the key of another", files.Key, foreignKey},
		{"no callers' CA", files.CallerCAs, []byte("no PEM")},
	} {
		t.Run(c.name, func(t *testing.T) {
			if err := os.WriteFile(c.file, c.content, 0o600); err != nil {
				t.Fatal(err)
			}
			logged := f.log.since()
			for range 3 { // told once, however many handshakes
				clock.add(2 * lookEvery)
				conn := connect()
				mustRecord(t, conn, newUnit("N1", "TM0000001"))
				conn.Close()
			}
			if n := lines(logged(), "level=ERROR msg=certificates_refused"); n != 1 {
				t.Errorf("%d lines about the broken file, want 1:\n%s", n, logged())
			}
			if _, failures := f.server.o.TLS.Loads(); failures != uint64(i)+1 {
				t.Errorf("%d failures counted, want %d", failures, i+1)
			}
			if got := f.server.o.TLS.Expiry(); !got.Equal(old) {
				t.Errorf("the certificate in use ends at %v, want the old one's %v", got, old)
			}
			if err := os.WriteFile(c.file, good[c.file], 0o600); err != nil {
				t.Fatal(err)
			}
			clock.add(2 * lookEvery)
			conn := connect()
			mustRecord(t, conn, newUnit("N1", "TM0000001"))
			conn.Close()
		})
	}
	if err := os.Remove(files.Key); err != nil {
		t.Fatal(err)
	}
	clock.add(2 * lookEvery)
	mustRecord(t, connect(), newUnit("N1", "TM0000001"))
}

func TestCertificatesMustBeGoodAtStart(t *testing.T) {
	ca := newAuthority(t)
	files := ca.write(t.TempDir(), server(), ca.pem())
	quiet := slog.New(slog.DiscardHandler)
	for _, c := range []struct {
		name   string
		change func(*CertificateFiles)
		wants  string
	}{
		{"no certificate", func(f *CertificateFiles) { f.Certificate += "x" }, "certificate"},
		{"no key", func(f *CertificateFiles) { f.Key += "x" }, "key"},
		{"no CA", func(f *CertificateFiles) { f.CallerCAs += "x" }, "CA of the callers"},
		{"key for a CA", func(f *CertificateFiles) { f.CallerCAs = f.Key }, "CA of the callers"},
	} {
		bad := files
		c.change(&bad)
		if _, err := OpenCertificates(bad, quiet, time.Now); err == nil || !strings.Contains(err.Error(), c.wants) {
			t.Errorf("%s: %v, want an error about %s", c.name, err, c.wants)
		}
	}
	if _, err := OpenCertificates(files, quiet, time.Now); err != nil {
		t.Error(err)
	}
}
