//go:build !nosync

package persist

// noSync is true only in a build that exists to fail the power-loss test.
const noSync = false
