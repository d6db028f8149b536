package persist_test

import (
	"bytes"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/persist"
)

// The stored hash of a damaged file can be that of the sound one: it must not
// be printed as if it had been verified.
func TestVerifyPrintsNoHashOfADamagedFile(t *testing.T) {
	path := filepath.Join(t.TempDir(), persist.FileName)
	l, err := persist.Open(persist.Options{Path: path, Now: time.Now})
	if err != nil {
		t.Fatal(err)
	}
	mark := "a detail to be found in the file"
	g := engine.Group{Records: []engine.Record{{Kind: engine.KindRefusal, Reason: engine.UnknownQuantity, Detail: mark}}}
	if err := l.Append(&g); err != nil {
		t.Fatal(err)
	}
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	var sound, damaged strings.Builder
	if err := persist.Verify(path, &sound); err != nil || !strings.Contains(sound.String(), "\nhash ") {
		t.Fatalf("a sound file: %v, %s", err, &sound)
	}
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for at := 0; ; at++ { // also in pages that are no longer in use
		n := bytes.Index(b[at:], []byte(mark))
		if n < 0 {
			break
		}
		at += n
		b[at] ^= 1
	}
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := persist.Verify(path, &damaged); err == nil || strings.Contains(damaged.String(), "\nhash ") {
		t.Errorf("a damaged file: %v, %s; want an error and no hash", err, &damaged)
	}
}
