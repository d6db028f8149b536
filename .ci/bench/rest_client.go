package main

import (
	"bufio"
	"bytes"
	"fmt"
	"io"
	"net"
	"strconv"
	"time"

	"golang.org/x/sync/errgroup"
)

// connection is a lean HTTP/1.1 client: one request at a time on a connection
// that is kept.
type connection struct {
	net     net.Conn
	in      *bufio.Reader
	request []byte
	body    []byte
	answer  []byte
}

func connect(address string) (*connection, error) {
	c, err := net.Dial("tcp", address)
	if err != nil {
		return nil, err
	}
	return &connection{net: c, in: bufio.NewReaderSize(c, 64<<10)}, nil
}

// post sends c.body and reads the answer into c.answer.
func (c *connection) post(path, quantity, rest string) error {
	b := append(c.request[:0], "POST "...)
	b = append(append(append(b, path...), quantity...), rest...)
	b = append(b, " HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: "...)
	b = strconv.AppendInt(b, int64(len(c.body)), 10)
	b = append(append(b, "\r\n\r\n"...), c.body...)
	c.request = b
	if _, err := c.net.Write(b); err != nil {
		return err
	}
	return c.read()
}

// read reads one answer, which must be of status 200.
func (c *connection) read() error {
	status, err := c.in.ReadSlice('\n')
	if err != nil {
		return err
	}
	ok := bytes.HasPrefix(status, []byte("HTTP/1.1 200 "))
	text := string(status)
	length, chunked := 0, false
	for {
		line, err := c.in.ReadSlice('\n')
		if err != nil {
			return err
		}
		line = bytes.TrimRight(line, "\r\n")
		if len(line) == 0 {
			break
		}
		if value, found := bytes.CutPrefix(line, []byte("Content-Length: ")); found {
			if length, err = strconv.Atoi(string(value)); err != nil {
				return err
			}
		}
		chunked = chunked || bytes.Equal(line, []byte("Transfer-Encoding: chunked"))
	}
	c.answer = c.answer[:0]
	if chunked {
		err = c.readChunks()
	} else {
		err = c.readMore(length)
	}
	if err == nil && !ok {
		err = fmt.Errorf("answered %q: %.300s", text, c.answer)
	}
	return err
}

func (c *connection) readMore(n int) error {
	from := len(c.answer)
	if cap(c.answer) < from+n {
		c.answer = append(make([]byte, 0, 2*(from+n)), c.answer...)
	}
	c.answer = c.answer[:from+n]
	_, err := io.ReadFull(c.in, c.answer[from:])
	return err
}

func (c *connection) readChunks() error {
	for {
		line, err := c.in.ReadSlice('\n')
		if err != nil {
			return err
		}
		n, err := strconv.ParseInt(string(bytes.TrimSpace(line)), 16, 32)
		if err != nil {
			return err
		}
		if n > 0 {
			if err := c.readMore(int(n)); err != nil {
				return err
			}
		}
		if _, err := c.in.Discard(2); err != nil {
			return err
		}
		if n == 0 {
			return nil
		}
	}
}

// restLoad posts from a number of connections.
type restLoad struct {
	connections []*connection
	feeds       []*feed
	batch       int             // readings a request; 0 posts single ones
	took        []time.Duration // of each request of the last run
}

func newRESTLoad(address, label string, connections, batch int) (*restLoad, error) {
	l := &restLoad{feeds: newFeeds(label, quantities, connections), batch: batch}
	for range connections {
		c, err := connect(address)
		if err != nil {
			return nil, err
		}
		l.connections = append(l.connections, c)
	}
	return l, nil
}

func (l *restLoad) close() {
	for _, c := range l.connections {
		c.net.Close()
	}
}

// run posts for that long.
func (l *restLoad) run(d time.Duration) (int, error) {
	until := time.Now().Add(d)
	took := make([][]time.Duration, len(l.connections))
	var group errgroup.Group
	for i, c := range l.connections {
		l.feeds[i].catchUp()
		group.Go(func() error {
			for {
				before := time.Now()
				if !before.Before(until) {
					return nil
				}
				if err := l.request(c, l.feeds[i]); err != nil {
					return err
				}
				took[i] = append(took[i], time.Since(before))
			}
		})
	}
	err := group.Wait()
	l.took = l.took[:0]
	for _, t := range took {
		l.took = append(l.took, t...)
	}
	return len(l.took) * max(l.batch, 1), err
}

func (l *restLoad) request(c *connection, f *feed) error {
	if l.batch == 0 {
		c.body = f.appendJSON(c.body[:0], false)
		if err := c.post("/v1/quantities/", f.quantity, "/readings"); err != nil {
			return err
		}
		return c.want(`"status":"APPLIED"`)
	}
	c.body = f.appendBatch(c.body[:0], l.batch)
	if err := c.post("/v1/readings", "", ""); err != nil {
		return err
	}
	count := strconv.Itoa(l.batch)
	return c.want(`"applied_count":`+count, `"appliedCount":`+count) // the stock gateway's spelling
}

// want wants the answer to hold one of the texts; the counts are at its end, or
// near.
func (c *connection) want(texts ...string) error {
	part := c.answer
	if len(part) > 4096 {
		part = part[len(part)-200:]
	}
	for _, text := range texts {
		if bytes.Contains(part, []byte(text)) {
			return nil
		}
	}
	return fmt.Errorf("the answer doesn't hold %s: %.600s", texts[0], part)
}
