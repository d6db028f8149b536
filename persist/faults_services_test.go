//go:build services

package persist_test

import (
	"bufio"
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"

	"github.com/hanwen/go-fuse/v2/fs"
	"github.com/hanwen/go-fuse/v2/fuse"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
)

// The fault filesystem passes everything through to a directory, but fails the
// nth write or sync when told. It must be a process of its own: a page fault on
// a mapping of the process's own mount would wait for ever.
const (
	faultsEnv   = "LEADLINE_TEST_FAULTS" // the backing directory; makes the test binary the filesystem
	controlFile = ".fault"               // in it: operation, errno, and which one from now on, such as "sync 5 2"
)

func TestMain(m *testing.M) {
	if backing := os.Getenv(faultsEnv); backing != "" {
		if err := serveFaults(backing, os.Args[1]); err != nil {
			fmt.Println(err)
			os.Exit(1)
		}
		return
	}
	os.Exit(m.Run())
}

// serveFaults mounts the filesystem, says so, and unmounts at the end of stdin.
func serveFaults(backing, mount string) error {
	root, err := fs.NewLoopbackRoot(backing)
	if err != nil {
		return err
	}
	f := &faults{control: filepath.Join(backing, controlFile)}
	server, err := fs.Mount(mount, &faultNode{LoopbackNode: root.(*fs.LoopbackNode), faults: f},
		&fs.Options{MountOptions: fuse.MountOptions{DirectMount: true, FsName: "faults"}})
	if err != nil {
		return err
	}
	fmt.Println("mounted")
	if _, err := io.Copy(io.Discard, os.Stdin); err != nil {
		return err
	}
	return server.Unmount()
}

// faults counts operations since the control file changed.
type faults struct {
	control string

	mu   sync.Mutex // guards all below
	text string
	seen int
}

// next returns the error of the next operation of that kind.
func (f *faults) next(operation string) syscall.Errno {
	f.mu.Lock()
	defer f.mu.Unlock()
	b, err := os.ReadFile(f.control)
	if err != nil {
		return 0
	}
	if string(b) != f.text {
		f.text, f.seen = string(b), 0
	}
	var what string
	var errno, nth int
	if _, err := fmt.Sscan(f.text, &what, &errno, &nth); err != nil || what != operation {
		return 0
	}
	if f.seen++; f.seen != nth {
		return 0
	}
	return syscall.Errno(errno)
}

type faultNode struct {
	*fs.LoopbackNode
	faults *faults
}

// WrapChild makes every node one with faults.
func (n *faultNode) WrapChild(_ context.Context, child fs.InodeEmbedder) fs.InodeEmbedder {
	return &faultNode{LoopbackNode: child.(*fs.LoopbackNode), faults: n.faults}
}

func (n *faultNode) Open(ctx context.Context, flags uint32) (fs.FileHandle, uint32, syscall.Errno) {
	h, f, errno := n.LoopbackNode.Open(ctx, flags)
	return n.wrap(h), f, errno
}

func (n *faultNode) Create(ctx context.Context, name string, flags, mode uint32, out *fuse.EntryOut) (*fs.Inode, fs.FileHandle, uint32, syscall.Errno) {
	i, h, f, errno := n.LoopbackNode.Create(ctx, name, flags, mode, out)
	return i, n.wrap(h), f, errno
}

func (n *faultNode) wrap(h fs.FileHandle) fs.FileHandle {
	if f, ok := h.(*fs.LoopbackFile); ok {
		return &faultFile{f, n.faults}
	}
	return h
}

type faultFile struct {
	*fs.LoopbackFile
	faults *faults
}

// PassthroughFd keeps the kernel from going past this filesystem.
func (f *faultFile) PassthroughFd() (int, bool) { return 0, false }

func (f *faultFile) Write(ctx context.Context, data []byte, off int64) (uint32, syscall.Errno) {
	if errno := f.faults.next("write"); errno != 0 {
		return 0, errno
	}
	return f.LoopbackFile.Write(ctx, data, off)
}

func (f *faultFile) Fsync(ctx context.Context, flags uint32) syscall.Errno {
	if errno := f.faults.next("sync"); errno != 0 {
		return errno
	}
	return f.LoopbackFile.Fsync(ctx, flags)
}

// mountFaults starts the filesystem and returns where it is, and its backing
// directory.
func mountFaults(t *testing.T) (mount, backing string) {
	t.Helper()
	mount, backing = t.TempDir(), t.TempDir()
	binary, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(binary, mount)
	cmd.Env = append(os.Environ(), faultsEnv+"="+backing)
	in, err1 := cmd.StdinPipe()
	out, err2 := cmd.StdoutPipe()
	if err := errors.Join(err1, err2, cmd.Start()); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		in.Close()
		if err := cmd.Wait(); err != nil {
			t.Errorf("the fault filesystem ended: %v", err)
		}
	})
	if line, err := bufio.NewReader(out).ReadString('\n'); strings.TrimSpace(line) != "mounted" {
		t.Fatalf("the fault filesystem says %q, %v", line, err)
	}
	return mount, backing
}

// TestFaultsOfTheDisk fails each write and each sync of a commit. Nothing that
// was acknowledged is lost, nothing that was refused shows, and after anything
// but a full disk the file isn't written again.
func TestFaultsOfTheDisk(t *testing.T) {
	for _, c := range []struct {
		name  string
		fault string
		errno syscall.Errno
		nth   int
		want  error
	}{
		{"the sync of the pages fails", "sync", syscall.EIO, 1, engine.ErrStorageFailed},
		{"the sync of the meta page fails", "sync", syscall.EIO, 2, engine.ErrStorageFailed},
		{"the sync of the pages finds the disk full", "sync", syscall.ENOSPC, 1, engine.ErrStorageFailed},
		{"the sync of the meta page finds the disk full", "sync", syscall.ENOSPC, 2, engine.ErrStorageFailed},
		{"the first write fails", "write", syscall.EIO, 1, engine.ErrStorageFailed},
		{"the first write finds the disk full", "write", syscall.ENOSPC, 1, engine.ErrDiskFull},
		{"a later write finds the quota used up", "write", syscall.EDQUOT, 3, engine.ErrDiskFull},
		{"a later write finds the disk full", "write", syscall.ENOSPC, 4, engine.ErrDiskFull},
	} {
		t.Run(c.name, func(t *testing.T) { testFault(t, fmt.Sprint(c.fault, " ", int(c.errno), " ", c.nth), c.want) })
	}
}

func testFault(t *testing.T, fault string, want error) {
	mount, backing := mountFaults(t)
	path := filepath.Join(mount, persist.FileName)
	salvaged := make(chan error, 1)
	l, err := persist.Open(persist.Options{Path: path, OnSalvage: func(_ string, err error) { salvaged <- err }})
	if err != nil {
		t.Fatal(err)
	}
	var written []engine.Record
	for i := range 3 {
		g := &engine.Group{Records: ledgertest.Records(200*i, 200)}
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		written = append(written, g.Records...)
	}
	old, err := os.Open(filepath.Join(backing, persist.FileName))
	if err != nil {
		t.Fatal(err)
	}
	defer old.Close()
	restore(t, filepath.Join(backing, controlFile), []byte(fault))
	if err := l.Append(&engine.Group{Records: ledgertest.Records(900, 200)}); !errors.Is(err, want) {
		t.Fatalf("append: %v; want %v", err, want)
	}
	before := content(t, old)
	if err := l.Append(&engine.Group{Records: ledgertest.Records(900, 1)}); !errors.Is(err, want) {
		t.Fatalf("append after the fault: %v; want %v", err, want)
	}
	sameRecords(t, written, l)
	if errors.Is(want, engine.ErrStorageFailed) {
		if err := <-salvaged; err != nil {
			t.Fatal(err)
		}
		sameRecords(t, written, l)
	}
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(before, content(t, old)) {
		t.Error("the file was written after the fault")
	}
	l = openAt(t, path)
	sameRecords(t, written, l)
	g := &engine.Group{Records: ledgertest.Records(900, 200)}
	if err := l.Append(g); err != nil {
		t.Fatal(err)
	}
	sameRecords(t, append(written, g.Records...), l)
}

func content(t *testing.T, f *os.File) []byte {
	t.Helper()
	b, err := io.ReadAll(io.NewSectionReader(f, 0, 1<<40))
	if err != nil {
		t.Fatal(err)
	}
	return b
}
