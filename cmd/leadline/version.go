package main

import (
	"context"
	"fmt"
	"runtime/debug"
)

// runVersion prints what the build recorded of itself.
func runVersion(_ context.Context, args []string, p process) error {
	if len(args) > 0 {
		return usagef("%q is not wanted; the command takes no arguments", args[0])
	}
	fmt.Fprintln(p.stdout, versionLine(debug.ReadBuildInfo()))
	return nil
}

// versionLine words the build information: the module's version, the source
// revision if it is known, and the Go version.
func versionLine(info *debug.BuildInfo, ok bool) string {
	if !ok {
		return "leadline (built without module information)"
	}
	line := "leadline " + info.Main.Version
	for _, s := range info.Settings {
		switch {
		case s.Key == "vcs.revision":
			line += " " + s.Value
		case s.Key == "vcs.modified" && s.Value == "true":
			line += " (modified)"
		}
	}
	return line + " " + info.GoVersion
}
