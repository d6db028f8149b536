package server

import (
	"fmt"
	"net"
	"net/http"
	"net/netip"
	"strings"

	"leadline.example/engine"
)

// origins keeps web pages that a user of the machine visits from acting here
// through the browser, which reaches loopback as any program does. Nobody is
// asked who they are, so this is about browsers only: other programs name no
// origin and may claim any host.
type origins struct {
	crossOrigin *http.CrossOriginProtection
	anyHost     bool
}

func newOrigins(anyHost bool) *origins {
	return &origins{http.NewCrossOriginProtection(), anyHost}
}

// check refuses a request that changes something if the browser says that it
// comes from another site's page; and one under another name than this
// machine's, for which a site can have its own name resolve to loopback (DNS
// rebinding) and so be of the same origin.
func (o *origins) check(r *http.Request) error {
	if !o.anyHost && !isLoopbackHost(r.Host) {
		return &httpError{
			refused: refuse(engine.InvalidField, "host", fmt.Sprintf("host is %q, and this service answers only as localhost or a loopback address; use one of these, or start it with --listen-anywhere", shorten(r.Host))),
			http:    http.StatusMisdirectedRequest,
		}
	}
	if o.crossOrigin.Check(r) != nil {
		return &httpError{
			refused: refuse(engine.NotSupported, "origin", fmt.Sprintf("%s comes from a web page of another origin, which is not served; send it from a program, or from a page of this host", shorten(r.Method))),
			http:    http.StatusForbidden,
		}
	}
	return nil
}

// isLoopbackHost tells whether a Host header, with or without port, names this
// machine's loopback. An absent one passes: browsers always send it.
func isLoopbackHost(host string) bool {
	if name, _, err := net.SplitHostPort(host); err == nil {
		host = name
	}
	if host == "" || strings.EqualFold(host, "localhost") {
		return true
	}
	ip, err := netip.ParseAddr(strings.Trim(host, "[]"))
	return err == nil && ip.Unmap().IsLoopback()
}
