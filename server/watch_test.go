package server

import (
	"errors"
	"testing"
	"testing/synctest"
	"time"

	"leadline.example/engine"
)

func TestSendGivesUpOnAStalledClient(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		release := make(chan struct{})
		calls := 0
		stalled := func(int) error {
			if calls++; calls > 2 {
				<-release // what a client that takes nothing makes of Send
			}
			return nil
		}
		start := time.Now()
		err := sendWithin(30*time.Second, stalled, func(send func(int) error) error {
			for {
				<-time.After(20 * time.Second) // no stall: there is nothing to send
				if err := send(1); err != nil {
					return err
				}
			}
		})
		close(release)
		if !isReason(err, engine.Overloaded) {
			t.Errorf("error %v", err)
		}
		if got := time.Since(start); got != 90*time.Second {
			t.Errorf("cut after %v of a fake clock, want 3 pauses and 30 s", got)
		}
	})
}

func TestSendPassesErrorsOn(t *testing.T) {
	gone := errors.New("the client is gone")
	err := sendWithin(time.Minute, func(int) error { return gone }, func(send func(int) error) error { return send(1) })
	if !errors.Is(err, gone) {
		t.Errorf("error %v", err)
	}
}
