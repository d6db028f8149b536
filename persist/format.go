package persist

import (
	"encoding/binary"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// Versions of the whole file. A file has the lowest that what it holds needs,
// so that an older program goes on reading one that has nothing new.
const (
	formatFirst  = 1
	formatSecond = 2 // see needs
	formatThird  = 3 // likewise
)

func putFormat(tx *bolt.Tx, version uint32) error {
	return tx.Bucket(metaBucket).Put(formatKey, binary.BigEndian.AppendUint32([]byte(magic), version))
}

// formatOf returns the version in a value that checkFormatValue accepts.
func formatOf(v []byte) uint32 { return binary.BigEndian.Uint32(v[len(magic):]) }

// needs returns the version of the format that a record needs. A program of
// version 1 takes kinds and dynamics that it doesn't know for damage, readings of
// one occasion for independent ones, and drops a horizon. One of version 2 takes a
// bound for a value and a mean of many for one of them, and drops what is declared
// of outliers, scale, floor and checks.
func needs(r *engine.Record) uint32 {
	switch y := &r.Reading; {
	case r.Kind == engine.KindStep, hasExtent(y.Extent, y.Upper, y.Samples):
		return formatThird
	case r.Kind == engine.KindInstrument:
		return instrumentNeeds(&r.Instrument.Declaration)
	case r.Kind == engine.KindRenewal, y.Occasion != "":
		return formatSecond
	case r.Declaration != nil:
		return declarationNeeds(r.Declaration)
	}
	return formatFirst
}

func instrumentNeeds(d *engine.InstrumentDeclaration) uint32 {
	if d.Repeatability.Learned != (engine.Repeatability{}) {
		return formatThird
	}
	return formatSecond
}

func declarationNeeds(d *engine.Declaration) uint32 {
	switch {
	case d.Outliers != engine.Outliers{}, d.Scale != engine.ScaleLinear, d.Repeatability.Floor != 0,
		d.ModelCheck != engine.ModelCheck{}, d.StepDetection != engine.StepDetection{}:
		return formatThird
	case d.Dynamics.Form > engine.DynamicsRandomWalk, d.BreachHorizon != 0:
		return formatSecond
	}
	return formatFirst
}

// entryNeeds returns that of a piece of checkpoint. A program of version 1 drops
// renewals, and takes the origin of a row for its value.
func entryNeeds(e *engine.CheckpointEntry) uint32 {
	version := uint32(formatFirst)
	if q := e.Quantity; q != nil {
		version = declarationNeeds(&q.Declaration)
		if len(q.Renewals) > 0 {
			version = max(version, formatSecond)
		}
	}
	for i := range e.Rows {
		version = max(version, rowNeeds(&e.Rows[i]))
	}
	return version
}

func rowNeeds(r *engine.Row) uint32 {
	switch {
	case hasExtent(r.Extent, r.Upper, r.Samples):
		return formatThird
	case r.Instrument != 0 || r.Occasion != 0:
		return formatSecond
	}
	return formatFirst
}
