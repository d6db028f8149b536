package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"io"
	"math"
	"net/http"
	"os"
	"path/filepath"
	"regexp"
	"runtime"
	"strconv"
	"strings"
	"testing"
	"time"
)

// readmeBase is where README.md's calls go; the test serves elsewhere.
const readmeBase = "http://127.0.0.1:8080"

// TestReadmeIsTrue runs README.md's curl lines, those in blocks marked sh, in
// their order against a fresh service, and compares what they give with the
// block behind, in which "…" stands for anything. In blocks marked json white
// space doesn't count; numbers of many digits are compared to 1e-9. curl
// itself isn't needed: the few options that the page uses are read here and
// the requests sent by net/http; of a stream, which curl would follow until
// its --max-time, one event is taken, and the millisecond let go by, since a scrape
// evaluates beliefs at its beginning.
func TestReadmeIsTrue(t *testing.T) {
	base := serveForReadme(t)
	blocks := readmeBlocks(t)
	commands := 0
	for i, b := range blocks {
		if b.language != "sh" {
			continue
		}
		if i+1 == len(blocks) || blocks[i+1].language != "json" && blocks[i+1].language != "text" {
			t.Fatalf("README.md:%d: no output follows the commands; add it in a block marked json or text", b.line)
		}
		var got strings.Builder
		for _, words := range shellCommands(t, b) {
			commands++
			got.WriteString(curl(t, b, words, base))
		}
		want := blocks[i+1]
		if problem := compareOutput(want, got.String()); problem != "" {
			t.Errorf("README.md:%d: %s\ngot:\n%s", want.line, problem, got.String())
		}
	}
	if commands < 10 {
		t.Errorf("README.md has %d curl lines that can be run; it should take a quantity from declaration to alert", commands)
	}
}

// serveForReadme serves an empty ledger until the test ends, and returns the
// address of REST.
func serveForReadme(t *testing.T) string {
	t.Helper()
	ctx, stop := context.WithCancel(context.Background())
	out, in := io.Pipe()
	var log bytes.Buffer
	code := make(chan int, 1)
	dir := t.TempDir()
	go func() {
		args := []string{"serve", "--data-dir", dir, "--http", "127.0.0.1:0", "--grpc", "127.0.0.1:0"}
		code <- run(ctx, args, in, &log, func(string) string { return "" })
		in.Close()
	}()
	line, err := bufio.NewReader(out).ReadString('\n')
	t.Cleanup(func() {
		stop()
		if c := <-code; c != exitOK {
			t.Errorf("the service ended with exit code %d: %s", c, log.String())
		}
	})
	if err != nil {
		t.Fatalf("no ready line: %v", err)
	}
	var ready struct{ HTTP string }
	if err := json.Unmarshal([]byte(line), &ready); err != nil {
		t.Fatalf("ready line %q: %v", line, err)
	}
	return "http://" + ready.HTTP
}

// readmeBlock is a fenced block of README.md.
type readmeBlock struct {
	language string
	line     int // of its fence
	text     string
}

func readReadme(t *testing.T) string {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("..", "..", "README.md"))
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

func readmeBlocks(t *testing.T) []readmeBlock {
	t.Helper()
	var blocks []readmeBlock
	inside := false
	for i, line := range strings.Split(readReadme(t), "\n") {
		language, fence := strings.CutPrefix(line, "```")
		switch {
		case fence && !inside:
			blocks = append(blocks, readmeBlock{language: language, line: i + 1})
			inside = true
		case fence:
			inside = false
		case inside:
			blocks[len(blocks)-1].text += line + "\n"
		}
	}
	return blocks
}

// shellCommands splits a block into commands and those into words, as a shell
// does with nothing but single quotes and spaces.
func shellCommands(t *testing.T, b readmeBlock) [][]string {
	t.Helper()
	var commands [][]string
	var words []string
	var word strings.Builder
	quoted, begun := false, false
	for _, c := range b.text {
		switch {
		case c == '\'':
			quoted, begun = !quoted, true
		case quoted || c != ' ' && c != '\n':
			word.WriteRune(c)
			begun = true
		default:
			if begun {
				words = append(words, word.String())
				word.Reset()
				begun = false
			}
			if c == '\n' && len(words) > 0 {
				commands, words = append(commands, words), nil
			}
		}
	}
	if quoted {
		t.Fatalf("README.md:%d: a quote is left open", b.line)
	}
	return commands
}

// curl does what a curl line says and returns what it prints.
func curl(t *testing.T, b readmeBlock, words []string, base string) string {
	t.Helper()
	if words[0] != "curl" {
		t.Fatalf("README.md:%d: %q is not curl; mark what this test can't run as console", b.line, words[0])
	}
	method, target, data, filter := "", "", "", ""
	header, stream := http.Header{"Accept": {"*/*"}}, false
	for rest := words[1:]; len(rest) > 0; rest = rest[1:] {
		word := rest[0]
		if len(rest) > 1 && strings.Contains(" -X -H -d --max-time | ", " "+word+" ") {
			rest = rest[1:]
		}
		switch word {
		case "-s":
		case "-sN":
			stream = true
		case "-X":
			method = rest[0]
		case "-H":
			name, value, _ := strings.Cut(rest[0], ": ")
			header.Set(name, value)
		case "-d":
			data = rest[0]
			header.Set("Content-Type", "application/x-www-form-urlencoded") // as curl has it
		case "--max-time":
		case "|":
			if rest[0] != "grep" || len(rest) != 2 {
				t.Fatalf("README.md:%d: a pipe leads to %q; this test knows grep and one word", b.line, rest)
			}
			filter, rest = rest[1], rest[1:]
		default:
			if !strings.HasPrefix(word, readmeBase+"/") || target != "" {
				t.Fatalf("README.md:%d: %q is neither an option that this test knows nor one address below %s", b.line, word, readmeBase)
			}
			target = base + strings.TrimPrefix(word, readmeBase)
		}
	}
	if method == "" {
		method = http.MethodGet
		if data != "" {
			method = http.MethodPost
		}
	}
	return grep(request(t, method, target, data, header, stream), filter)
}

// request sends a request and returns the body of the answer, or of a stream its
// first event.
func request(t *testing.T, method, target, data string, header http.Header, stream bool) string {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), 10*time.Second)
	defer cancel()
	asked, err := http.NewRequestWithContext(ctx, method, target, strings.NewReader(data))
	if err != nil {
		t.Fatal(err)
	}
	asked.Header = header
	response, err := http.DefaultClient.Do(asked)
	if err != nil {
		t.Fatal(err)
	}
	defer response.Body.Close()
	var body strings.Builder
	lines := bufio.NewReader(response.Body)
	for event := false; ; {
		line, err := lines.ReadString('\n')
		body.WriteString(line)
		if err == io.EOF {
			return body.String()
		}
		if err != nil {
			t.Fatalf("%s %s: %v, after %q", method, target, err, body.String())
		}
		if stream && event && line == "\n" {
			for shown := time.Now(); time.Since(shown) < time.Millisecond; {
				runtime.Gosched()
			}
			return body.String()
		}
		event = event || strings.HasPrefix(line, "data:")
	}
}

// grep keeps the lines that contain word.
func grep(text, word string) string {
	var kept strings.Builder
	for line := range strings.Lines(text) {
		if strings.Contains(line, word) {
			kept.WriteString(line)
		}
	}
	return kept.String()
}

var (
	whiteSpace    = regexp.MustCompile(`\s+`)
	trailingSpace = regexp.MustCompile(`(?m)[ \t]+$`)
	// Numbers of many digits: the last of them may differ between processors.
	longNumber = regexp.MustCompile(`-?\d+\.\d{6,}(e[+-]?\d+)?\b|…`)
)

// compareOutput returns what is wrong with got, or "".
func compareOutput(block readmeBlock, got string) string {
	tidy := func(s string) string { return strings.TrimSpace(trailingSpace.ReplaceAllString(s, "")) }
	if block.language == "json" {
		tidy = func(s string) string { return whiteSpace.ReplaceAllString(s, "") }
	}
	want := tidy(block.text)
	var numbers []float64
	var pattern strings.Builder
	pattern.WriteString(`(?s)\A`)
	end := 0
	for _, at := range longNumber.FindAllStringIndex(want, -1) {
		pattern.WriteString(regexp.QuoteMeta(want[end:at[0]]))
		end = at[1]
		if want[at[0]:end] == "…" {
			pattern.WriteString(`.*?`)
			continue
		}
		n, err := strconv.ParseFloat(want[at[0]:end], 64)
		if err != nil {
			return err.Error()
		}
		numbers = append(numbers, n)
		pattern.WriteString(`(-?[0-9.]+(?:e[+-]?[0-9]+)?)`)
	}
	pattern.WriteString(regexp.QuoteMeta(want[end:]) + `\z`)
	match := regexp.MustCompile(pattern.String()).FindStringSubmatch(tidy(got))
	if match == nil {
		return "the output is not that of the page"
	}
	for i, n := range numbers {
		if g, err := strconv.ParseFloat(match[i+1], 64); err != nil || math.Abs(g-n) > 1e-9*math.Abs(n) {
			return "the output has " + match[i+1] + " where the page has " + strconv.FormatFloat(n, 'g', -1, 64)
		}
	}
	return ""
}

// TestReadmeOutputsAreCompared shows that the comparison can fail.
func TestReadmeOutputsAreCompared(t *testing.T) {
	for _, tt := range []struct {
		name, language, page, got string
		want                      bool
	}{
		{"equal", "text", "a 1\n", "a 1\n", true},
		{"another figure", "text", "a 1\n", "a 2\n", false},
		{"white space in text", "text", "a  1\n", "a 1\n", false},
		{"white space in JSON", "json", "{\"a\":\n 1}", `{"a":1}`, true},
		{"left out", "json", `{"a":1,…,"d":4}`, `{"a":1,"b":2,"c":3,"d":4}`, true},
		{"left out, then another figure", "json", `{"a":1,…,"d":4}`, `{"a":1,"b":2,"c":3,"d":5}`, false},
		{"lines left out", "text", "a\n…\nd\n", "a\nb\nc\nd\n", true},
		{"more at the end", "text", "a\n", "a\nb\n", false},
		{"last digit", "json", `{"a":0.8253134860749074}`, `{"a":0.8253134860749075}`, true},
		{"eighth digit", "json", `{"a":0.8253134860749074}`, `{"a":0.8253134960749074}`, false},
		{"last digit of a small one", "json", `{"a":1.36329682545485e-21}`, `{"a":1.36329682545486e-21}`, true},
		{"another exponent", "json", `{"a":1.36329682545485e-21}`, `{"a":1.36329682545485e-22}`, false},
	} {
		t.Run(tt.name, func(t *testing.T) {
			problem := compareOutput(readmeBlock{language: tt.language, text: tt.page}, tt.got)
			if (problem == "") != tt.want {
				t.Errorf("compareOutput gives %q", problem)
			}
		})
	}
}
