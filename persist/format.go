package persist

import (
	"encoding/binary"
	"slices"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// Versions of the whole file. A file has the lowest that what it holds needs,
// so that an older program goes on reading one that has nothing new.
const (
	formatFirst  = 1
	formatSecond = 2 // see needs
)

func putFormat(tx *bolt.Tx, version uint32) error {
	return tx.Bucket(metaBucket).Put(formatKey, binary.BigEndian.AppendUint32([]byte(magic), version))
}

// formatOf returns the version in a value that checkFormatValue accepts.
func formatOf(v []byte) uint32 { return binary.BigEndian.Uint32(v[len(magic):]) }

// needs returns the version of the format that a record needs. A program of
// version 1 takes kinds and dynamics that it doesn't know for damage, readings of
// one occasion for independent ones, and drops a horizon.
func needs(r *engine.Record) uint32 {
	if r.Kind >= engine.KindInstrument || r.Reading.Occasion != "" || r.Declaration != nil && moves(r.Declaration) {
		return formatSecond
	}
	return formatFirst
}

func moves(d *engine.Declaration) bool {
	return d.Dynamics.Form > engine.DynamicsRandomWalk || d.BreachHorizon != 0
}

// entryNeeds returns that of a piece of checkpoint: a program of version 1 drops
// renewals, and takes the origin of a row for its value.
func entryNeeds(e *engine.CheckpointEntry) uint32 {
	hasOrigin := func(r engine.Row) bool { return r.Instrument != 0 || r.Occasion != 0 }
	q := e.Quantity
	if q != nil && (len(q.Renewals) > 0 || moves(&q.Declaration)) || slices.ContainsFunc(e.Rows, hasOrigin) {
		return formatSecond
	}
	return formatFirst
}
