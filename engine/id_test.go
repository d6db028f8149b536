package engine_test

import (
	"regexp"
	"strings"
	"testing"

	"leadline.example/engine"
)

func TestCheckID(t *testing.T) {
	tests := []struct {
		id   string
		want bool
		why  string
	}{
		{"pump3.coupling-gap", true, "letters, digit, dot, hyphen"},
		{"urn:dev:ow:1", true, "SenML name, RFC 8428 4.5.1"},
		{"a/b", true, "a slash inside"},
		{"x:renew", true, "looks like a verb"},
		{strings.Repeat("a", 255), true, "longest"},
		{"", false, "empty"},
		{strings.Repeat("a", 256), false, "too long"},
		{"-a", false, "does not begin with a letter or digit"},
		{"a//b", false, "empty segment"},
		{"a/", false, "empty last segment"},
		{"a/../b", false, "climbs"},
		{"a/./b", false, "stays"},
		{"a b", false, "space"},
		{"ä", false, "not ASCII"},
	}
	for _, test := range tests {
		if got := engine.CheckID("id", test.id) == nil; got != test.want {
			t.Errorf("%.20q (%s): accepted %v, want %v", test.id, test.why, got, test.want)
		}
	}
}

// An ID is accepted if and only if the grammar of the interface has it.
func FuzzCheckID(f *testing.F) {
	grammar := regexp.MustCompile(`\A[A-Za-z0-9][A-Za-z0-9\-:./_]{0,254}\z`)
	for _, s := range []string{"a/b", "a//b", "a/..", "urn:dev:ow:1", "\x00", "a\n"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		want := grammar.MatchString(s)
		for _, segment := range strings.Split(s, "/") {
			want = want && segment != "" && segment != "." && segment != ".."
		}
		if got := engine.CheckID("id", s) == nil; got != want {
			t.Errorf("CheckID(%q) accepts: %v, want %v", s, got, want)
		}
	})
}
