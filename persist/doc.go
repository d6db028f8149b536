// Package persist keeps the ledger and the checkpoints in one bbolt file. It
// knows bytes, pages and syncs, and nothing of what a reading means.
package persist
