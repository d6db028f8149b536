package server

import (
	"bytes"
	"testing"

	"leadline.example/engine"
)

func TestPageTokenIsBound(t *testing.T) {
	bound := binding("quantities", "pump", "false")
	token := encodePageToken(bound, []byte("pump3"))
	if cursor, err := decodePageToken(token, bound); err != nil || string(cursor) != "pump3" {
		t.Errorf("%q, %v", cursor, err)
	}
	for _, other := range [][]string{
		{"quantities", "pump", "true"}, {"beliefs", "pump", "false"}, {"quantities", "pumpf", "alse"}, {"quantities", "pump"},
	} {
		if _, err := decodePageToken(token, binding(other...)); err == nil {
			t.Errorf("token of another list is taken for %q", other)
		}
	}
}

// A token is made once and may be sent back years later, to another build.
func TestPageTokenKeepsItsForm(t *testing.T) {
	const made = "AUr-fQGASmz4cHVtcDOOgzY_" // computed in Python from the description in page_token.go
	if got := encodePageToken(binding("quantities", "pump", "false"), []byte("pump3")); got != made {
		t.Errorf("token %s, once %s", got, made)
	}
}

func FuzzPageToken(f *testing.F) {
	bound := binding("list")
	f.Add(encodePageToken(bound, []byte("pump3")))
	f.Add("")
	f.Add("AQ==")
	f.Fuzz(func(t *testing.T, token string) {
		cursor, err := decodePageToken(token, bound)
		if (err == nil) == (cursor == nil) {
			t.Fatalf("cursor %q and error %v", cursor, err)
		}
		if err != nil {
			if reason, field := problemOf(err); reason != engine.InvalidField || field != "page_token" {
				t.Fatalf("%v", err)
			}
			return
		}
		if again := encodePageToken(bound, cursor); again != token {
			t.Fatalf("%q is read as %q, which is written %q", token, cursor, again)
		}
	})
}

// Tokens are found damaged at every byte.
func TestDamagedPageTokenIsRefused(t *testing.T) {
	bound := binding("list")
	token := []byte(encodePageToken(bound, []byte("pump3")))
	for i := range token {
		damaged := bytes.Clone(token)
		damaged[i] ^= 1
		if _, err := decodePageToken(string(damaged), bound); err == nil {
			t.Errorf("damage at byte %d of %s is not found", i, token)
		}
	}
}
