package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"net/http"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"golang.org/x/sync/errgroup"
)

// page reads a page to its end, as it is if coding is identity, and returns its
// bytes as they came.
func page(client *http.Client, url, coding string, into io.Writer) error {
	request, err := http.NewRequest(http.MethodGet, url, nil)
	if err != nil {
		return err
	}
	request.Header.Set("Accept-Encoding", coding)
	response, err := client.Do(request)
	if err != nil {
		return err
	}
	defer response.Body.Close()
	if response.StatusCode != http.StatusOK {
		return fmt.Errorf("%s answers %s", url, response.Status)
	}
	_, err = io.Copy(into, response.Body)
	return err
}

// sample returns the value of a series without labels.
func sample(text []byte, name string) (float64, error) {
	for line := range strings.Lines(string(text)) {
		if value, found := strings.CutPrefix(line, name+" "); found {
			return strconv.ParseFloat(strings.TrimSpace(value), 64)
		}
	}
	return 0, fmt.Errorf("the page has no %s", name)
}

// scrape compares scrapes with the same bytes from memory, and ingest with and
// without a scrape each second.
func (b *bench) scrape() (err error) {
	service, err := b.serve("scrape")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, service.stop()) }()
	if err := declareAll(b.ctx, service, quantities); err != nil {
		return err
	}
	load, err := newStreamLoad(service.GRPC, "m", quantities)
	if err != nil {
		return err
	}
	defer load.close()
	if _, err := load.runCount(200_000); err != nil {
		return err
	}
	if err := b.scrapeTimes(service); err != nil {
		return err
	}
	return b.scrapedIngest(service, load)
}

func (b *bench) scrapeTimes(service *process) error {
	client := &http.Client{Transport: &http.Transport{DisableCompression: true}}
	var text bytes.Buffer
	live := "http://" + service.HTTP + "/metrics"
	if err := page(client, live, "identity", &text); err != nil {
		return err
	}
	file := filepath.Join(b.tmp, "page")
	if err := os.WriteFile(file, text.Bytes(), 0o600); err != nil {
		return err
	}
	stored, err := b.standIn("cached", file)
	if err != nil {
		return err
	}
	defer stored.kill()
	cached := "http://" + stored.HTTP + "/metrics"

	var ours, theirs series
	turns := 5 * b.rounds
	var before, after bytes.Buffer
	if err := page(client, live, "identity", &before); err != nil {
		return err
	}
	for range turns {
		for url, times := range map[string]*series{live: &ours, cached: &theirs} {
			began := time.Now()
			if err := page(client, url, "identity", io.Discard); err != nil {
				return err
			}
			*times = append(*times, time.Since(began).Seconds())
		}
	}
	if err := page(client, live, "identity", &after); err != nil {
		return err
	}
	const garbage = "go_memstats_alloc_bytes_total"
	first, err := sample(before.Bytes(), garbage)
	if err != nil {
		return err
	}
	last, err := sample(after.Bytes(), garbage)
	if err != nil {
		return err
	}
	fmt.Printf("scrape of %d quantities, %.1f MB: %.1f ms; same bytes from memory: %.1f ms\n", quantities, float64(text.Len())/1e6, ours.median()*1e3, theirs.median()*1e3)
	b.figure("scrape / same bytes from a cache", ours.over(theirs).median(), 3, true)
	b.figure("garbage of a scrape, MB", (last-first)/float64(turns+1)/1e6, 1, true)
	return nil
}

// scrapedIngest compares ingest while scraped each second with ingest without.
func (b *bench) scrapedIngest(service *process, load *streamLoad) error {
	client := &http.Client{}
	scraped := func(d time.Duration) (n int, err error) {
		ctx, cancel := context.WithCancel(b.ctx)
		group, _ := errgroup.WithContext(ctx)
		group.Go(func() error {
			tick := time.NewTicker(time.Second)
			defer tick.Stop()
			for {
				if err := page(client, "http://"+service.HTTP+"/metrics", "gzip", io.Discard); err != nil {
					return err
				}
				select {
				case <-tick.C:
				case <-ctx.Done():
					return nil
				}
			}
		})
		n, err = load.run(d)
		cancel()
		return n, errors.Join(err, group.Wait())
	}
	window := b.window
	b.window = max(window, 2*time.Second) // else the only scrape would be the one at the start
	defer func() { b.window = window }()
	r, err := b.alternate(
		contender{"gRPC stream while scraped every second", scraped, service},
		contender{"gRPC stream without", load.run, service},
	)
	if err != nil {
		return err
	}
	b.ratio("ingest while scraped / ingest without", r[0], r[1], 0.9)
	return nil
}
