package main

import (
	"errors"
	"io"
	"net/http"
	"os/exec"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"testing"

	"github.com/rogpeppe/go-internal/testscript"
)

func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){"leadline": main})
}

// TestJourneys runs testdata/script/*.txtar, each on the real main in a process
// of its own. Beside the commands of testscript they have:
//
//	start NAME ARGS...               leadline ARGS; waits for the ready line, sets $NAME to the URL, $NAME_http and $NAME_grpc
//	end NAME SIGNAL EXIT-CODE        sends TERM, INT or KILL, waits, compares (KILL: -1)
//	exit CODE [ARGS...]              runs leadline ARGS to its end, compares the exit code
//	http STATUS METHOD URL [BODY]    calls, compares the status; the body is stdout
func TestJourneys(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir:                 "testdata/script",
		RequireExplicitExec: true,
		RequireUniqueNames:  true,
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			"start": startCommand,
			"end":   endCommand,
			"exit":  exitCommand,
			"http":  httpCommand,
		},
		Setup: func(env *testscript.Env) error {
			env.Values[runningKey{}] = map[string]*running{}
			return nil
		},
	})
}

// runningKey is the key of a script's processes among its values.
type runningKey struct{}

func processes(ts *testscript.TestScript) map[string]*running {
	return ts.Value(runningKey{}).(map[string]*running)
}

func startCommand(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 2 {
		ts.Fatalf("usage: start NAME ARGS...")
	}
	file, err := lookPath("leadline", ts.Getenv("PATH"))
	ts.Check(err)
	cmd := exec.Command(file, args[1:]...)
	cmd.Dir = ts.MkAbs(".")
	cmd.Env = []string{
		"PATH=" + ts.Getenv("PATH"), "TMPDIR=" + ts.Getenv("TMPDIR"),
		"LEADLINE_DATA_DIR=" + ts.Getenv("LEADLINE_DATA_DIR"),
		"LEADLINE_HTTP=127.0.0.1:0", "LEADLINE_GRPC=127.0.0.1:0",
	}
	r, err := launch(cmd)
	ts.Check(err)
	ts.Defer(func() {
		if _, err := r.stop(syscall.SIGKILL); err != nil {
			ts.Logf("stop %s: %v", args[0], err)
		}
	})
	processes(ts)[args[0]] = r
	ts.Setenv(args[0], r.http)
	ts.Setenv(args[0]+"_http", strings.TrimPrefix(r.http, "http://"))
	ts.Setenv(args[0]+"_grpc", r.grpc)
}

func endCommand(ts *testscript.TestScript, neg bool, args []string) {
	signals := map[string]syscall.Signal{"TERM": syscall.SIGTERM, "INT": syscall.SIGINT, "KILL": syscall.SIGKILL}
	if neg || len(args) != 3 || signals[args[1]] == 0 {
		ts.Fatalf("usage: end NAME TERM|INT|KILL EXIT-CODE")
	}
	r, ok := processes(ts)[args[0]]
	if !ok {
		ts.Fatalf("no process %s was started", args[0])
	}
	code, err := r.stop(signals[args[1]])
	ts.Check(err)
	_, err = io.WriteString(ts.Stderr(), r.stderr.String())
	ts.Check(err)
	if strconv.Itoa(code) != args[2] {
		ts.Fatalf("%s ended with %d, want %s: %s", args[0], code, args[2], r.stderr)
	}
}

func exitCommand(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 1 {
		ts.Fatalf("usage: exit CODE [ARGS...]")
	}
	err := ts.Exec("leadline", args[1:]...)
	code := 0
	var exit *exec.ExitError
	if errors.As(err, &exit) {
		code = exit.ExitCode()
	} else {
		ts.Check(err)
	}
	if strconv.Itoa(code) != args[0] {
		ts.Fatalf("leadline %s ended with %d, want %s", strings.Join(args[1:], " "), code, args[0])
	}
}

func httpCommand(ts *testscript.TestScript, neg bool, args []string) {
	methods := []string{"GET", "PUT", "POST", "DELETE"}
	if neg || len(args) < 3 || len(args) > 4 || !slices.Contains(methods, args[1]) {
		ts.Fatalf("usage: http STATUS GET|PUT|POST|DELETE URL [BODY]")
	}
	var body io.Reader
	if len(args) == 4 {
		body = strings.NewReader(args[3])
	}
	request, err := http.NewRequest(args[1], args[2], body)
	ts.Check(err)
	response, err := http.DefaultClient.Do(request)
	ts.Check(err)
	defer response.Body.Close()
	answer, err := io.ReadAll(response.Body)
	ts.Check(err)
	_, err = ts.Stdout().Write(answer)
	ts.Check(err)
	if strconv.Itoa(response.StatusCode) != args[0] {
		ts.Fatalf("%s %s answers %s, want %s: %s", args[1], args[2], response.Status, args[0], answer)
	}
}
