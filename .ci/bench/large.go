package main

import (
	"fmt"
	"os"
	"path/filepath"
	"time"

	"leadline.example/persist"
)

// largeScale fills the service with 100,000 quantities and 5,000,000 readings,
// and then stops it, and kills it, and starts it again.
func (b *bench) largeScale() error {
	const many, readings = 10 * quantities, 5_000_000
	service, err := b.serve("large")
	if err != nil {
		return err
	}
	began := time.Now()
	if err := declareAll(b.ctx, service, many); err != nil {
		return err
	}
	fmt.Printf("declared %d quantities in %.1f s\n", many, time.Since(began).Seconds())
	file := filepath.Join(b.tmp, "large", persist.FileName)
	before := sizeOf(file)
	began = time.Now()
	n, err := b.streamLarge(service, many, readings)
	if err != nil {
		return err
	}
	took := time.Since(began)
	now, most := service.memory()
	fmt.Printf("streamed %d readings in %.1f s: %.0f readings/s\n", n, took.Seconds(), float64(n)/took.Seconds())
	fmt.Printf("memory: %.0f MB, at most %.0f MB\n", float64(now)/1e6, float64(most)/1e6)
	fmt.Printf("file: %.0f MB, %.1f bytes a reading with states, rows and free pages\n", float64(sizeOf(file))/1e6, float64(sizeOf(file)-before)/float64(n))

	began = time.Now()
	if err := service.stop(); err != nil {
		return err
	}
	fmt.Printf("stopped in %.2f s, with a last checkpoint; file: %.0f MB, %.1f bytes a reading\n", time.Since(began).Seconds(),
		float64(sizeOf(file))/1e6, float64(sizeOf(file)-before)/float64(n))
	if service, err = b.serve("large"); err != nil {
		return err
	}
	now, _ = service.memory()
	fmt.Printf("started in %.2f s after a stop; memory %.0f MB\n", service.started.Seconds(), float64(now)/1e6)
	if _, err := b.streamLarge(service, many, readings/10); err != nil {
		return err
	}
	if err := service.kill(); err != nil {
		return err
	}
	if service, err = b.serve("large"); err != nil {
		return err
	}
	fmt.Printf("started in %.2f s after a kill\n", service.started.Seconds())
	return service.stop()
}

func (b *bench) streamLarge(service *process, many, readings int) (int, error) {
	load, err := newStreamLoad(service.GRPC, fmt.Sprint("l", readings, "-"), many)
	if err != nil {
		return 0, err
	}
	defer load.close()
	return load.runCount(readings)
}

// sizeOf returns the bytes of a file.
func sizeOf(path string) int64 {
	info, err := os.Stat(path)
	if err != nil {
		return 0
	}
	return info.Size()
}
