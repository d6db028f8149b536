package posterior

// Restate changes what was known of a further state before any reading: its variance
// from one above 0 to another. That is a reading of 0 whose precision is the
// difference of theirs, and which is taken away if that is negative. Where readings
// have left so little of what was known that nothing firm would remain, the state
// stays as it is.
func (f *Filter) Restate(state int, from, to float64) {
	precision := 1/to - 1/from
	if precision == 0 || 1/f.Variance(state)+precision <= 0.1/to {
		return
	}
	h := f.space[:f.n]
	clear(h)
	h[state] = 1
	innovation := -f.mean[state].Value()
	gain, total := f.weigh(h, 1/precision)
	for i, g := range gain {
		f.mean[i] = f.mean[i].Plus(g * (innovation / total))
	}
	if f.account != nil {
		f.account.update(f.account.of(SourceEntry, state, 0), h, gain, total, 1/precision)
	}
}
