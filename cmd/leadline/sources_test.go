package main

import (
	"os"
	"path/filepath"
	"testing"
)

// readSources returns the source of each file of a package but its tests.
func readSources(t *testing.T, pkg string) map[string]string {
	t.Helper()
	dir := goList(t, "{{.Dir}}", pkg)
	if len(dir) != 1 {
		t.Fatalf("go list gives %d directories for %s", len(dir), pkg)
	}
	sources := map[string]string{}
	for _, name := range goList(t, `{{join .GoFiles "\n"}}`, pkg) {
		source, err := os.ReadFile(filepath.Join(dir[0], name))
		if err != nil {
			t.Fatal(err)
		}
		sources[filepath.Join(pkg, name)] = string(source)
	}
	return sources
}
