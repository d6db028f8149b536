package main

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/exec"
	"strings"
	"syscall"
)

// running is a leadline process that has said where it listens.
type running struct {
	cmd    *exec.Cmd
	http   string // http://host:port
	grpc   string // host:port
	stderr *bytes.Buffer
	waited chan error // holds the result of Wait once the process is gone
}

// launch starts cmd and returns once it has printed its ready line. A process
// that ends before is an error that quotes what it said.
func launch(cmd *exec.Cmd) (*running, error) {
	r := &running{cmd: cmd, stderr: new(bytes.Buffer), waited: make(chan error, 1)}
	cmd.Stderr = r.stderr
	stdout, err := cmd.StdoutPipe()
	if err != nil {
		return nil, err
	}
	if err := cmd.Start(); err != nil {
		return nil, err
	}
	lines := bufio.NewReader(stdout)
	line, err := lines.ReadString('\n')
	if err != nil {
		return nil, fmt.Errorf("no ready line; %v: %s", cmd.Wait(), r.stderr)
	}
	go func() {
		_, _ = io.Copy(io.Discard, lines) // Wait may only be called once the pipe is drained
		r.waited <- cmd.Wait()
	}()
	var ready struct{ HTTP, GRPC string }
	if err := json.Unmarshal([]byte(line), &ready); err != nil {
		return nil, errors.Join(fmt.Errorf("ready line %q: %w", line, err), cmd.Process.Kill())
	}
	r.http, r.grpc = "http://"+ready.HTTP, ready.GRPC
	return r, nil
}

// stop sends a signal, waits, and returns the exit code; -1 if the signal
// itself ended the process.
func (r *running) stop(signal syscall.Signal) (int, error) {
	if err := r.cmd.Process.Signal(signal); err != nil && !errors.Is(err, os.ErrProcessDone) {
		return 0, err
	}
	err := <-r.waited
	r.waited <- err // for whoever asks again
	var exit *exec.ExitError
	if err != nil && !errors.As(err, &exit) {
		return 0, err
	}
	return r.cmd.ProcessState.ExitCode(), nil
}

// lookPath finds a program in a given PATH.
func lookPath(name, path string) (string, error) {
	for dir := range strings.SplitSeq(path, string(os.PathListSeparator)) {
		file := dir + string(os.PathSeparator) + name
		if info, err := os.Stat(file); err == nil && info.Mode()&0o111 != 0 && !info.IsDir() {
			return file, nil
		}
	}
	return "", fmt.Errorf("%s is not in %s", name, path)
}
