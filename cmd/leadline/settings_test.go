package main

import (
	"errors"
	"fmt"
	"strings"
	"testing"

	"leadline.example/engine"
)

func TestFaultSaysWhetherReadingsAreTaken(t *testing.T) {
	for _, tt := range []struct {
		name string
		err  error
		want bool // that nothing is acknowledged
	}{
		{"failed sync", fmt.Errorf("append: %w", engine.ErrStorageFailed), true},
		{"full disk", fmt.Errorf("append: %w", engine.ErrDiskFull), true},
		{"failed rebuild", errors.New("rebuild the belief of \"gap\": checksum"), false},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if got := faultMessage(tt.err); strings.Contains(got, "nothing is acknowledged") != tt.want {
				t.Errorf("the log says %q", got)
			}
		})
	}
}

func TestAddressesBeyondLoopbackTakeAFlag(t *testing.T) {
	for _, tt := range []struct {
		address  string
		anywhere bool
		want     bool
		why      string
	}{
		{"127.0.0.1:8080", false, true, "loopback"},
		{"127.9.9.9:8080", false, true, "all of 127/8 is loopback (RFC 1122, 3.2.1.3)"},
		{"[::1]:0", false, true, "loopback (RFC 4291, 2.5.3)"},
		{"localhost:8080", false, true, "loopback by name (RFC 6761, 6.3)"},
		{"0.0.0.0:8080", false, false, "every address"},
		{":8080", false, false, "every address"},
		{"[::]:8080", false, false, "every address"},
		{"192.0.2.1:8080", false, false, "another address"},
		{"plant.example:8080", false, false, "a name can resolve to anything"},
		{"0.0.0.0:8080", true, true, "the flag says so"},
		{"8080", true, false, "not host:port, whatever the flag says"},
		{"", false, false, "not host:port"},
	} {
		t.Run(tt.address, func(t *testing.T) {
			err := checkAddress("--http", tt.address, tt.anywhere)
			if (err == nil) != tt.want {
				t.Errorf("checkAddress gives %v, although: %s", err, tt.why)
			}
			var usage *usageError
			if err != nil && !errors.As(err, &usage) {
				t.Errorf("%v is no usage error", err)
			}
		})
	}
}
