package server_test

import (
	"path/filepath"
	"testing"

	"leadline.example/engine"
	"leadline.example/server"
)

// A page of another site can have the browser of whoever visits it send simple
// requests to this machine, with a body that is JSON under another name.
func TestWebPagesOfOthersPostNothing(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	const path, body = "/v1/quantities/gap/readings", `{"value":0.8}`
	for _, test := range []struct {
		name   string
		header []string
		code   int
		why    string
	}{
		{"program", nil, 200, "no browser"},
		{"own page", []string{"Sec-Fetch-Site", "same-origin"}, 200, "same origin"},
		{"typed by the user", []string{"Sec-Fetch-Site", "none"}, 200, "no page sent it"},
		{"other site", []string{"Content-Type", "text/plain", "Origin", "http://evil.example", "Sec-Fetch-Site", "cross-site"}, 403, "cross-site"},
		{"other port", []string{"Sec-Fetch-Site", "same-site"}, 403, "another origin of the same site"},
		{"old browser", []string{"Origin", "http://evil.example"}, 403, "the origin is not the host"},
		{"sandboxed page", []string{"Origin", "null"}, 403, "an opaque origin"},
	} {
		t.Run(test.name, func(t *testing.T) {
			a := r.call("POST", path, body, test.header...).want(test.code)
			if test.code == 403 {
				a.wantProblem(403, engine.NotSupported, "origin")
			}
		})
	}
	if got, want := r.call("GET", "/v1/quantities/gap/belief", "", "Sec-Fetch-Site", "cross-site").want(200).json("reading_count"), "3"; got == nil || got.(interface{ String() string }).String() != want {
		t.Errorf("%v readings were applied, want %s", got, want)
	}
}

// A name that resolves to loopback makes a page of the same origin, which could
// read as well.
func TestForeignHostsAreRefused(t *testing.T) {
	closed := startServer(t)
	open := startServerOn(t, filepath.Join(t.TempDir(), "ledger"), newClock(), func(o *server.Options) { o.AnyHost = true })
	for _, test := range []struct {
		host string
		ok   bool
	}{
		{"localhost", true}, {"LOCALHOST:8080", true}, {"127.0.0.1", true}, {"127.9.9.9:80", true},
		{"[::1]:8080", true}, {"[::1]", true}, {"[::ffff:127.0.0.1]:1", true},
		{"evil.example", false}, {"evil.example:8080", false}, {"localhost.evil.example", false},
		{"127.0.0.1.evil.example", false}, {"192.168.1.7:8080", false}, {"0.0.0.0:8080", false},
	} {
		for _, path := range []string{"/v1/quantities", "/metrics", "/healthz"} {
			a := closed.call("GET", path, "", "Host", test.host)
			switch {
			case test.ok && a.code == 421:
				t.Errorf("GET %s of host %s is refused: %s", path, test.host, a.body)
			case !test.ok:
				a.wantProblem(421, engine.InvalidField, "host")
			}
			if a := open.call("GET", path, "", "Host", test.host); a.code == 421 {
				t.Errorf("GET %s of host %s is refused although any may be named: %s", path, test.host, a.body)
			}
		}
	}
}
