package ledgertest_test

import (
	"errors"
	"testing"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

func TestMemory(t *testing.T) {
	ledgertest.Run(t, func(*testing.T) ledgertest.Store {
		m := ledgertest.NewMemory(nil)
		return func(*testing.T) engine.Ledger {
			m = m.Reopen()
			return m
		}
	})
}

func TestMemoryFailsWhenTold(t *testing.T) {
	m := ledgertest.NewMemory(nil)
	m.SetFault(ledgertest.FailAt(2, engine.ErrDiskFull))
	for i, wanted := range []error{nil, engine.ErrDiskFull, engine.ErrDiskFull} {
		if err := m.Append(&engine.Group{Records: ledgertest.Records(i, 4)}); !errors.Is(err, wanted) {
			t.Fatalf("append %d: %v, want %v", i+1, err, wanted)
		}
	}
	if n := len(ledgertest.Replayed(t, m, 1)); n != 4 {
		t.Fatalf("%d records, want the 4 of the first group", n)
	}
	m = m.Reopen()
	if err := m.Append(&engine.Group{Records: ledgertest.Records(4, 1)}); err != nil {
		t.Fatal(err)
	}
}
