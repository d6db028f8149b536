package ledgertest

import (
	"fmt"

	"leadline.example/engine"
)

// Readings returns records of a quantity whose index entries are rows. The
// rows are to have the positions that Append will give the records.
func Readings(number engine.QuantityNumber, rows []engine.Row) []engine.Record {
	records := make([]engine.Record, len(rows))
	for i, r := range rows {
		records[i] = engine.Record{
			ReceiveTime: r.Time, Kind: engine.KindReading, Number: number, Revision: 1,
			Reading: engine.Reading{
				Value: r.Value, Upper: r.Upper, Extent: r.Extent, Samples: r.Samples, HasTime: true, Time: r.Time,
				HasUncertainty: r.HasUncertainty, RandomStandardUncertainty: r.Uncertainty,
			},
		}
		if r.HasID {
			records[i].Reading.ID = engine.ReadingID(fmt.Sprintf("compressor-2/%06d", r.Position))
		}
	}
	return records
}

// Entries returns the checkpoint of the quantities 1 to n, without rows. Their
// states include the records up to through.
func Entries(n int, through engine.Position) []engine.CheckpointEntry {
	entries := make([]engine.CheckpointEntry, n)
	for i := range entries {
		number := engine.QuantityNumber(i + 1)
		entries[i] = engine.CheckpointEntry{Number: number, Quantity: quantity(number), State: []byte("state"), Through: through}
	}
	return entries
}
