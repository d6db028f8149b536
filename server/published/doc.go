// Package published holds no code of the service. Its tests run the service as
// a whole, over HTTP and gRPC on a ledger file, and compare what it says with
// published numbers, with a naive model and with itself: see the files of
// testdata/published for the sources.
package published
