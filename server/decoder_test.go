package server

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// bodyCase is one body of the corpus and what has to become of it.
type bodyCase struct {
	line   int
	body   string
	reason engine.Reason // empty: it is accepted
	field  string
}

// readCorpus reads testdata/bodies/readings.txt, whose head explains it.
func readCorpus(t testing.TB, quantity string) []bodyCase {
	t.Helper()
	text, err := os.ReadFile("testdata/bodies/readings.txt")
	if err != nil {
		t.Fatal(err)
	}
	var cases []bodyCase
	var body []string
	for i, line := range strings.Split(string(text), "\n") {
		verdict, ends := strings.CutPrefix(line, "> ")
		switch {
		case ends:
			c := bodyCase{line: i + 1, body: strings.ReplaceAll(strings.Join(body, "\n"), "<Q>", quantity)}
			if verdict != "OK" {
				reason, field, _ := strings.Cut(verdict, " ")
				c.reason, c.field = engine.Reason(reason), field
			}
			cases, body = append(cases, c), nil
		case line != "" && !strings.HasPrefix(line, "#"):
			body = append(body, line)
		}
	}
	if len(cases) < 70 {
		t.Fatalf("only %d bodies in the corpus", len(cases))
	}
	return cases
}

func problemOf(err error) (engine.Reason, string) {
	var refused *engine.Error
	if !errors.As(err, &refused) {
		return "", ""
	}
	return refused.Reason, refused.Field
}

func (c *bodyCase) check(t *testing.T, decoder string, err error, path string) {
	t.Helper()
	reason, field := problemOf(err)
	if (err != nil) != (reason != "") {
		t.Errorf("line %d, %s: %v is no refusal", c.line, decoder, err)
	}
	// A place that isn't JSON, or a name used twice, is found where it is found.
	sameField := field == path+c.field || c.reason == engine.MalformedBody
	if reason != c.reason || reason != "" && !sameField {
		t.Errorf("line %d, %s: %s of %q, want %s of %q (%v)", c.line, decoder, reason, field, c.reason, path+c.field, err)
	}
	if err != nil && c.reason == engine.InvalidField && !strings.HasPrefix(err.Error(), path+c.field+" ") {
		t.Errorf("line %d, %s: %q doesn't begin with the field", c.line, decoder, err)
	}
}

func TestCorpusThroughEveryDecoderOfOneReading(t *testing.T) {
	for _, c := range readCorpus(t, "") {
		fast, fastErr := decodeReading("gap", []byte(c.body))
		strict, strictErr := decodeReadingStrictly("gap", []byte(c.body))
		c.check(t, "fast", fastErr, "")
		c.check(t, "strict", strictErr, "")
		if diff := cmp.Diff(strict, fast[0]); fastErr == nil && diff != "" {
			t.Errorf("line %d (-strict +fast):\n%s", c.line, diff)
		}
	}
}

func TestCorpusThroughEveryDecoderOfABatch(t *testing.T) {
	for _, c := range readCorpus(t, `"quantity":"gap",`) {
		body := []byte(`{"readings":[{"quantity":"gap","value":1},` + c.body + `]}`)
		if c.reason == engine.MissingField && !strings.Contains(c.body, "gap") {
			c.field = "value" // which is looked for first
		}
		fast, fastErr := decodeReadings(body)
		strict, strictErr := decodeReadingsStrictly(body)
		c.check(t, "fast", fastErr, "readings[1].")
		c.check(t, "strict", strictErr, "readings[1].")
		if diff := cmp.Diff(strict, fast); diff != "" {
			t.Errorf("line %d (-strict +fast):\n%s", c.line, diff)
		}
	}
}

// What is refused is kept in the ledger only up to a length.
func TestReadingsOverALimitAreErrors(t *testing.T) {
	long := func(n int) string { return strings.Repeat("x", n) }
	for _, test := range []struct {
		name, body string
		field      string
		reason     engine.Reason
	}{
		{"reading_id of 128", `{"quantity":"gap","value":1,"reading_id":"` + long(128) + `"}`, "", ""},
		{"reading_id of 129", `{"quantity":"gap","value":1,"reading_id":"` + long(129) + `"}`, "readings[0].reading_id", engine.InvalidField},
		{"unit of 32", `{"quantity":"gap","value":1,"unit":"` + long(32) + `"}`, "", ""},
		{"unit of 33", `{"quantity":"gap","value":1,"unit":"` + long(33) + `"}`, "readings[0].unit", engine.InvalidField},
		{"quantity of 255", `{"quantity":"` + long(255) + `","value":1}`, "", ""},
		{"quantity of 256", `{"quantity":"` + long(256) + `","value":1}`, "readings[0].quantity", engine.InvalidField},
		{"instrument of 256", `{"quantity":"gap","value":1,"instrument":"` + long(256) + `"}`, "readings[0].instrument", engine.InvalidField},
		{"occasion of 128", `{"quantity":"gap","value":1,"occasion":"` + long(128) + `"}`, "", ""},
		{"occasion of 129", `{"quantity":"gap","value":1,"occasion":"` + long(129) + `"}`, "readings[0].occasion", engine.InvalidField},
	} {
		t.Run(test.name, func(t *testing.T) {
			body := []byte(`{"readings":[` + test.body + `]}`)
			_, fast := decodeReadings(body)
			_, strict := decodeReadingsStrictly(body)
			for _, err := range []error{fast, strict} {
				if reason, field := problemOf(err); reason != test.reason || field != test.field {
					t.Errorf("%v", err)
				}
			}
		})
	}
}

func TestBatchesHaveBounds(t *testing.T) {
	batch := func(n int) []byte {
		return []byte(`{"readings":[` + strings.TrimSuffix(strings.Repeat(`{"quantity":"gap","value":1},`, n), ",") + `]}`)
	}
	for _, test := range []struct {
		n      int
		reason engine.Reason
	}{{0, engine.MissingField}, {1, ""}, {10_000, ""}, {10_001, engine.BatchTooLarge}} {
		fast, fastErr := decodeReadings(batch(test.n))
		strict, strictErr := decodeReadingsStrictly(batch(test.n))
		for decoder, err := range map[string]error{"fast": fastErr, "strict": strictErr} {
			if reason, _ := problemOf(err); reason != test.reason {
				t.Errorf("%d readings, %s: %v", test.n, decoder, err)
			}
		}
		if test.reason == "" && (len(fast) != test.n || len(strict) != test.n) {
			t.Errorf("%d readings became %d and %d", test.n, len(fast), len(strict))
		}
	}
}

func TestBodiesAroundTheReadings(t *testing.T) {
	const good = `{"readings":[{"quantity":"gap","value":1}]}`
	for _, test := range []struct {
		name, body string
		reason     engine.Reason
	}{
		{"good", good, ""},
		{"white space around", " \r\n\t" + good + "\n ", ""},
		{"empty", "", engine.MalformedBody},
		{"white space only", " \n", engine.MalformedBody},
		{"null", "null", engine.MalformedBody},
		{"array", "[" + good + "]", engine.MalformedBody},
		{"string", `"` + "readings" + `"`, engine.MalformedBody},
		{"two objects", good + good, engine.MalformedBody},
		{"a character after it", good + "x", engine.MalformedBody},
		{"a NUL after it", good + "\x00", engine.MalformedBody},
		{"byte order mark", "\xef\xbb\xbf" + good, engine.MalformedBody},
		{"UTF-16", "{\x00\"\x00", engine.MalformedBody},
		{"invalid UTF-8", `{"readings":[{"quantity":"gap","value":1,"unit":"` + "\xff" + `"}]}`, engine.MalformedBody},
		{"cut short", good[:len(good)-2], engine.MalformedBody},
		{"nothing in it", "{}", engine.MissingField},
		{"null readings", `{"readings":null}`, engine.MissingField},
		{"readings twice", `{"readings":[{"quantity":"gap","value":1}],"readings":[]}`, engine.MalformedBody},
		{"readings an object", `{"readings":{}}`, engine.InvalidField},
		{"a null reading", `{"readings":[null]}`, engine.InvalidField},
		{"a number as reading", `{"readings":[1]}`, engine.InvalidField},
		{"another field", `{"readings":[{"quantity":"gap","value":1}],"dry_run":true}`, engine.UnknownField},
		{"deep", `{"readings":` + strings.Repeat("[", 20_000), engine.InvalidField},
		{"deep in an unknown field", `{"x":` + strings.Repeat(`{"x":`, 20_000), engine.UnknownField},
		{"comment", `{/* */"readings":[]}`, engine.MalformedBody},
		{"no quantity", `{"readings":[{"value":1}]}`, engine.MissingField},
		{"empty quantity", `{"readings":[{"quantity":"","value":1}]}`, engine.MissingField},
	} {
		t.Run(test.name, func(t *testing.T) {
			fast, fastErr := decodeReadings([]byte(test.body))
			strict, strictErr := decodeReadingsStrictly([]byte(test.body))
			for decoder, err := range map[string]error{"fast": fastErr, "strict": strictErr} {
				if reason, _ := problemOf(err); reason != test.reason {
					t.Errorf("%s: %v", decoder, err)
				}
			}
			if diff := cmp.Diff(strict, fast); diff != "" {
				t.Errorf("(-strict +fast):\n%s", diff)
			}
		})
	}
}

// The scanner is there for the plain shape; were it to give up on that, the
// answers would still be right and only slow.
func TestScannerTakesThePlainShape(t *testing.T) {
	body := batchBody(3)
	if readings, ok := scanReadings(body); !ok || len(readings) != 3 {
		t.Errorf("scanner gave up on %s", body)
	}
	if _, ok := scanReading("gap", []byte(`{"value":0.83,"time":"2026-03-01T12:00:00Z","reading_id":"µ","unit":"mm","instrument":"calliper-7","occasion":"round 3"}`)); !ok {
		t.Error("scanner gave up on a single reading")
	}
	for _, body := range []string{
		`{"above":40,"unit":"mm"}`, `{"below":1e-3}`, `{"between":{"lower":18,"upper":20}}`, `{"value":0.83,"sample_count":600}`,
	} {
		if _, ok := scanReading("gap", []byte(body)); !ok {
			t.Errorf("scanner gave up on %s", body)
		}
	}
}

// batchBody is a batch as a gateway of a plant would send it.
func batchBody(n int) []byte {
	var b bytes.Buffer
	b.WriteString(`{"readings":[`)
	for i := range n {
		if i > 0 {
			b.WriteByte(',')
		}
		fmt.Fprintf(&b, `{"quantity":"pump%d.coupling-gap","value":%.4f,"time":"2026-03-01T12:%02d:%02d.250Z","reading_id":"gw7-%08d","unit":"mm"}`,
			i%40, 0.8+float64(i%97)/1000, i/60%60, i%60, i)
	}
	b.WriteString(`]}`)
	return b.Bytes()
}

func FuzzReadingsBody(f *testing.F) {
	for _, c := range readCorpus(f, `"quantity":"gap",`) {
		f.Add([]byte(`{"readings":[` + c.body + `]}`))
	}
	f.Add(batchBody(3))
	f.Fuzz(func(t *testing.T, body []byte) {
		fast, ok := scanReadings(body)
		strict, err := decodeReadingsStrictly(body)
		if ok && err != nil {
			t.Fatalf("the scanner takes what is refused with %v", err)
		}
		if ok {
			if diff := cmp.Diff(strict, fast); diff != "" {
				t.Fatalf("(-strict +fast):\n%s", diff)
			}
		}
		if (err == nil) != (len(strict) > 0) {
			t.Fatalf("%d readings and error %v", len(strict), err)
		}
		if reason, _ := problemOf(err); err != nil && reason == "" {
			t.Fatalf("%v has no reason", err)
		}
		single, okSingle := scanReading("gap", body)
		strictSingle, errSingle := decodeReadingStrictly("gap", body)
		if okSingle && errSingle != nil {
			t.Fatalf("the scanner takes a reading that is refused with %v", errSingle)
		}
		if diff := cmp.Diff(strictSingle, single); okSingle && diff != "" {
			t.Fatalf("(-strict +fast):\n%s", diff)
		}
	})
}

func FuzzDeclareQuantity(f *testing.F) {
	for _, body := range []string{
		`{"unit":"mm","prior":{"mean":0.8,"standard_deviation":0.05},"repeatability":{"standard_deviation":0.02}}`,
		`{"prior":{"low":0.7,"high":0.9,"probability":0.95,"time":"2026-01-01T00:00:00Z"},"repeatability":{"learned":{}}}`,
		`{"prior":{"vague":{}},"repeatability":{"learned":{"guess":0.02,"worth":4}},"dynamics":{"constant":{}},"tolerance":{"lower":0}}`,
		`{"dynamics":{"random_walk":{"standard_deviation":0.01,"per":"86400s"}},"decision_rule":{"conform_probability":0.9}}`,
		`{"dynamics":{"random_walk":{"standard_deviation":0.01,"per":"9300000000s"}}}`,
		`{"decision_rule":{"conform_probability":0,"breach_probability":0}}`,
		`{"dynamics":{"linear_trend":{"standard_deviation":0.01,"per":"3600s","slope":{"mean":0.1,"standard_deviation":0.1,"per":"86400s"},"slope_wander":{"standard_deviation":0.01,"per":"86400s"}}}}`,
		`{"dynamics":{"linear_trend":{"slope":{"mean":0,"standard_deviation":0.1,"per":"0.5s"}}},"tolerance":{"upper":1},"breach_horizon":"86400s"}`,
		`{"dynamics":{"mean_reverting":{"mean":-25,"standard_deviation":1.5,"half_life":"3600s"}}}`,
		`{"repeatability":{"standard_deviation":0.02},"outliers":{"probability":0.01,"inflation":10},"scale":"LINEAR"}`,
		`{"repeatability":{"learned":{"floor":0.01}},"model_check":{"window":100,"objections_per_year":0.01}}`,
		`{"repeatability":{"learned":{"guess":0.1,"worth":3,"floor":0.01}},"scale":"LOG","step_detection":{"false_alarm_interval":1e4,"on_step":{"widen":0.5}}}`,
		`{"repeatability":{"standard_deviation":0.02},"model_check":{},"step_detection":{}}`,
	} {
		f.Add([]byte(body))
	}
	f.Fuzz(func(t *testing.T, body []byte) {
		message := new(leadlinev1.Quantity)
		if err := decodeStrict(body, message, false); err != nil {
			if reason, _ := problemOf(err); reason == "" {
				t.Fatalf("%v has no reason", err)
			}
			return
		}
		declared, err := declarationOf(message)
		if err == nil {
			err = declared.Check()
		}
		if err != nil {
			if reason, _ := problemOf(err); reason == "" {
				t.Fatalf("%v has no reason", err)
			}
			return
		}
		// What is answered declares the same again.
		written, err := marshalJSON(quantityMessage(&engine.Quantity{ID: "gap", Declaration: declared}))
		if err != nil {
			t.Fatal(err)
		}
		again := new(leadlinev1.Quantity)
		if err := decodeStrict(written, again, false); err != nil {
			t.Fatalf("%v in %s", err, written)
		}
		redeclared, err := declarationOf(again)
		if err != nil {
			t.Fatalf("%v in %s", err, written)
		}
		if redeclared != declared {
			t.Fatalf("%+v became %+v by way of %s", declared, redeclared, written)
		}
	})
}
