package persist

// CloseFile takes the file away under the ledger: writes fail from then on, the
// mapping stays.
func (l *Ledger) CloseFile() error { return l.file.Close() }

// WithMapping reserves so many bytes of address space.
func (o Options) WithMapping(bytes int) Options {
	o.mapBytes = bytes
	return o
}
