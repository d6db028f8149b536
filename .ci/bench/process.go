package main

import (
	"bufio"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"time"
)

// process is a server, in a process of its own.
type process struct {
	command    *exec.Cmd
	HTTP, GRPC string
	started    time.Duration // until it said where it listens
}

// start runs a program that prints where it listens.
func (b *bench) start(name string, args ...string) (*process, error) {
	s := &process{command: exec.CommandContext(b.ctx, name, args...)}
	s.command.Stderr = os.Stderr
	s.command.Cancel = func() error { return s.command.Process.Signal(syscall.SIGTERM) }
	s.command.WaitDelay = 30 * time.Second
	out, err := s.command.StdoutPipe()
	if err != nil {
		return nil, err
	}
	began := time.Now()
	if err := s.command.Start(); err != nil {
		return nil, err
	}
	line, err := bufio.NewReader(out).ReadBytes('\n')
	if err == nil {
		err = json.Unmarshal(line, s)
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("%s does not start: %w", name, err), s.kill())
	}
	s.started = time.Since(began)
	return s, nil
}

// serve starts the service on a directory of that name.
func (b *bench) serve(name string) (*process, error) {
	dir := filepath.Join(b.tmp, name)
	if b.profile != "" {
		return b.standIn("whole", dir, filepath.Join(b.profile, name+".cpu"))
	}
	return b.start(b.leadline, "serve", "--data-dir", dir, "--http", "127.0.0.1:0", "--grpc", "127.0.0.1:0", "--log-level", "WARN")
}

// standIn starts this program as a stand-in.
func (b *bench) standIn(name string, args ...string) (*process, error) {
	self, err := os.Executable()
	if err != nil {
		return nil, err
	}
	return b.start(self, append([]string{"stand-in", name}, args...)...)
}

// stop ends a process in good order.
func (s *process) stop() error {
	_ = s.command.Process.Signal(syscall.SIGTERM) // gone already: Wait says so
	return s.command.Wait()
}

// kill ends a process on the spot.
func (s *process) kill() error {
	_ = s.command.Process.Kill()
	_ = s.command.Wait() // its status is the kill's
	return nil
}

// cpu returns the CPU time that a process has used; 0 of none.
func (s *process) cpu() time.Duration {
	if s == nil {
		return 0
	}
	stat, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", s.command.Process.Pid))
	if err != nil {
		return 0
	}
	_, rest, _ := strings.Cut(string(stat), ") ") // behind the name, which may have spaces
	var ticks int64
	for _, field := range strings.Fields(rest)[11:13] { // utime and stime, see proc(5)
		n, _ := strconv.ParseInt(field, 10, 64) // the kernel writes numbers
		ticks += n
	}
	return time.Duration(ticks) * 10 * time.Millisecond // USER_HZ is 100
}

// ownCPU returns the CPU time that this process has used.
func ownCPU() time.Duration {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		return 0
	}
	return time.Duration(u.Utime.Nano() + u.Stime.Nano())
}

// memory returns the resident bytes of a process, now and at most.
func (s *process) memory() (now, most int64) {
	read := func(key string) int64 {
		text := firstMatch(fmt.Sprintf("/proc/%d/status", s.command.Process.Pid), key)
		n, err := strconv.ParseInt(strings.TrimSuffix(text, " kB"), 10, 64)
		if err != nil {
			return 0
		}
		return n << 10
	}
	return read("VmRSS"), read("VmHWM")
}
