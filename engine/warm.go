package engine

// A batch over thousands of quantities spends most of its time waiting for
// memory: each reading needs a slot of the window and a track that were last
// touched long ago. A loop that only loads them lets the processor wait for
// about ten at a time instead of one; the decisions and folds that follow find
// them close by. The sums are kept only so that the loads are not left out.

// warm loads what deciding on readings will look at.
func (w *window) warm(found []resolved) (sum uint64) {
	found = found[:min(len(found), maxGroupRecords)]
	current, previous := w.current.slots, w.previous.slots
	for i := range found {
		h := found[i].hash[0]
		sum += current[h&uint64(len(current)-1)] + previous[h&uint64(len(previous)-1)]
	}
	for i := range found {
		if t := found[i].track; t != nil {
			sum += uint64(t.rules.revision) + uint64(t.decidedTally.count)
		}
	}
	return sum
}

// warm loads what folding records will look at.
func (k *Keeper) warm(records []Record) (sum uint64) {
	for i := range records {
		if n := int(records[i].Number); n > 0 && n <= len(k.byNumber) {
			t := k.byNumber[n-1]
			sum += uint64(t.tally.count) + uint64(t.fold.count) + uint64(t.last.Time) +
				uint64(len(t.rows)) + uint64(len(t.fresh))
		}
	}
	for i := range records {
		if n := int(records[i].Number); n > 0 && n <= len(k.byNumber) {
			if rows := k.byNumber[n-1].rows; len(rows) < cap(rows) {
				sum += uint64(rows[:len(rows)+1][len(rows)].Position)
			}
		}
	}
	return sum
}
