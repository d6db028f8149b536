package persist_test

import (
	"bytes"
	"path/filepath"
	"testing"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
)

func TestLedger(t *testing.T) {
	ledgertest.Run(t, func(t *testing.T) ledgertest.Store {
		path := filepath.Join(t.TempDir(), persist.FileName)
		return func(t *testing.T) engine.Ledger { return openAt(t, path) }
	})
}

// openAt opens a ledger that is verified when the test ends.
func openAt(t *testing.T, path string) *persist.Ledger {
	t.Helper()
	l, err := persist.Open(persist.Options{Path: path})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		l.Close()
		var out bytes.Buffer
		if err := persist.Verify(path, &out); err != nil {
			t.Errorf("%v\n%s", err, &out)
		}
	})
	return l
}
