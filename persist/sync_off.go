//go:build nosync

package persist

// noSync makes commits skip fdatasync, so that the power-loss test can show
// that it finds a loss. Nothing else is to be built so.
const noSync = true
