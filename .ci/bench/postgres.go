package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"time"

	"github.com/jackc/pgx/v5"
	"github.com/jackc/pgx/v5/pgconn"
	"golang.org/x/sync/errgroup"
)

const callers = 64

// database is a PostgreSQL cluster of our own, on a socket in our directory,
// with Debian's settings but for more memory and rarer checkpoints, both in its
// favour. One table of readings is keyed by quantity and reading ID, so that it
// knows a retry, as the service does; the other is keyed by a number, which is
// cheaper and counts a retry twice.
type database struct {
	dir  string
	bin  string
	user []string // command that becomes the database's user; initdb refuses root
}

const schema = `
CREATE TABLE keyed (
	quantity int NOT NULL, time timestamptz NOT NULL, value float8 NOT NULL, reading_id text NOT NULL,
	PRIMARY KEY (quantity, reading_id));
CREATE TABLE numbered (
	id bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
	quantity int NOT NULL, time timestamptz NOT NULL, value float8 NOT NULL, reading_id text NOT NULL);
CREATE TABLE state (
	quantity int PRIMARY KEY, n bigint NOT NULL, mean float8 NOT NULL, weight float8 NOT NULL, last timestamptz) WITH (fillfactor = 50);
`

func (b *bench) startDatabase() (*database, error) {
	bins, err := filepath.Glob("/usr/lib/postgresql/*/bin")
	if err != nil || len(bins) == 0 {
		return nil, errors.New("PostgreSQL is not installed; run apt-get install postgresql")
	}
	d := &database{dir: filepath.Join(b.tmp, "postgresql"), bin: bins[len(bins)-1]}
	if os.Geteuid() == 0 {
		d.user = []string{"runuser", "-u", "postgres", "--"}
	}
	if err := os.Chmod(b.tmp, 0o755); err != nil {
		return nil, err
	}
	if err := os.Mkdir(d.dir, 0o777); err != nil {
		return nil, err
	}
	if err := os.Chmod(d.dir, 0o777); err != nil { // whatever the umask is
		return nil, err
	}
	if err := d.command("initdb", "-D", d.data(), "-A", "trust", "-U", "bench", "--no-locale", "-E", "UTF8"); err != nil {
		return nil, err
	}
	options := "-c listen_addresses= -c fsync=on -c synchronous_commit=on -c shared_buffers=512MB -c max_wal_size=8GB -c max_connections=200 -k " + d.dir
	if err := d.command("pg_ctl", "-D", d.data(), "-w", "-l", filepath.Join(d.dir, "log"), "-o", options, "start"); err != nil {
		return nil, err
	}
	return d, d.fill(b.ctx)
}

func (d *database) data() string { return filepath.Join(d.dir, "data") }

func (d *database) command(name string, args ...string) error {
	words := append(append(slices.Clone(d.user), filepath.Join(d.bin, name)), args...)
	out, err := exec.Command(words[0], words[1:]...).CombinedOutput()
	if err != nil {
		return fmt.Errorf("%s: %w: %s", name, err, out)
	}
	return nil
}

func (d *database) stop() error {
	return d.command("pg_ctl", "-D", d.data(), "-m", "fast", "-w", "stop")
}

func (d *database) connect(ctx context.Context) (*pgx.Conn, error) {
	return pgx.Connect(ctx, "host="+d.dir+" user=bench dbname=postgres")
}

func (d *database) fill(ctx context.Context) error {
	c, err := d.connect(ctx)
	if err != nil {
		return err
	}
	defer c.Close(ctx)
	if _, err := c.Exec(ctx, schema); err != nil {
		return err
	}
	_, err = c.Exec(ctx, "INSERT INTO state SELECT i, 0, 0, 0, NULL FROM generate_series(0, $1::int - 1) i", quantities)
	return err
}

func (d *database) version(ctx context.Context) string {
	c, err := d.connect(ctx)
	if err != nil {
		return "unknown"
	}
	defer c.Close(ctx)
	var version, fsync, commit string
	if c.QueryRow(ctx, "SHOW server_version").Scan(&version) != nil || c.QueryRow(ctx, "SHOW fsync").Scan(&fsync) != nil ||
		c.QueryRow(ctx, "SHOW synchronous_commit").Scan(&commit) != nil {
		return "unknown"
	}
	return fmt.Sprintf("%s, fsync=%s, synchronous_commit=%s", version, fsync, commit)
}

// databaseLoad writes readings from a number of connections, each with
// quantities of its own, so that none waits for another's row.
type databaseLoad struct {
	table string
	conns []*pgx.Conn
	feeds []*feed
	row   map[string]int
	step  func(ctx context.Context, c *pgx.Conn, f *feed) (int, error)
	took  []time.Duration
}

func (d *database) load(ctx context.Context, table string, connections int, batch bool) (*databaseLoad, error) {
	label := fmt.Sprintf("p%d-%t-", connections, batch) // no two loads have a reading ID in common
	l := &databaseLoad{table: table, feeds: newFeeds(label, quantities, connections), row: map[string]int{}}
	for i := range quantities {
		l.row[quantityID(i)] = i
	}
	l.step = l.one
	if batch {
		l.step = l.many
	}
	for range connections {
		c, err := d.connect(ctx)
		if err != nil {
			return nil, err
		}
		l.conns = append(l.conns, c)
	}
	return l, nil
}

func (l *databaseLoad) close() {
	for _, c := range l.conns {
		c.Close(context.Background())
	}
}

const updateOne = "UPDATE state SET n = n + 1, mean = (mean * weight + $2 * 1.5625) / (weight + 1.5625), weight = weight + 1.5625, last = $3 WHERE quantity = $1"

// one is a transaction of an INSERT and an UPDATE in one round trip: pgx sends
// a batch as a pipeline, which is one transaction.
func (l *databaseLoad) one(ctx context.Context, c *pgx.Conn, f *feed) (int, error) {
	f.next()
	var p pgx.Batch
	row := l.row[f.quantity]
	p.Queue("INSERT INTO "+l.table+" (quantity, time, value, reading_id) VALUES ($1, $2, $3, $4)", row, f.at, f.value, string(f.appendID(nil)))
	p.Queue(updateOne, row, f.value, f.at)
	return 1, c.SendBatch(ctx, &p).Close()
}

const updateMany = `UPDATE state SET n = state.n + d.n, mean = (state.mean * state.weight + d.sum * 1.5625) / (state.weight + d.n * 1.5625),
	weight = state.weight + d.n * 1.5625, last = d.last
	FROM unnest($1::int[], $2::bigint[], $3::float8[], $4::timestamptz[]) AS d (quantity, n, sum, last) WHERE state.quantity = d.quantity`

// many is a transaction of a COPY and one UPDATE for all its quantities, whose
// sums the client makes.
func (l *databaseLoad) many(ctx context.Context, c *pgx.Conn, f *feed) (int, error) {
	tx, err := c.Begin(ctx)
	if err != nil {
		return 0, err
	}
	defer tx.Rollback(ctx) // does nothing after the commit
	rows, index := make([][]any, 0, perMessage), map[int]int{}
	var at []int
	var n []int64
	var sum []float64
	var last []time.Time
	for range perMessage {
		f.next()
		row := l.row[f.quantity]
		rows = append(rows, []any{row, f.at, f.value, string(f.appendID(nil))})
		i, found := index[row]
		if !found {
			i = len(at)
			index[row] = i
			at, n, sum, last = append(at, row), append(n, 0), append(sum, 0), append(last, f.at)
		}
		n[i]++
		sum[i] += f.value
		last[i] = f.at
	}
	if _, err := tx.CopyFrom(ctx, pgx.Identifier{l.table}, []string{"quantity", "time", "value", "reading_id"}, pgx.CopyFromRows(rows)); err != nil {
		return 0, err
	}
	tag, err := tx.Exec(ctx, updateMany, at, n, sum, last)
	if err != nil {
		return 0, err
	}
	if err := wantRows(tag, len(at)); err != nil {
		return 0, err
	}
	return perMessage, tx.Commit(ctx)
}

func wantRows(tag pgconn.CommandTag, n int) error {
	if int(tag.RowsAffected()) != n {
		return fmt.Errorf("%d rows of %d were updated", tag.RowsAffected(), n)
	}
	return nil
}

func (l *databaseLoad) run(d time.Duration) (int, error) {
	until := time.Now().Add(d)
	counts, took := make([]int, len(l.conns)), make([][]time.Duration, len(l.conns))
	group, ctx := errgroup.WithContext(context.Background())
	for i, c := range l.conns {
		l.feeds[i].catchUp()
		group.Go(func() error {
			for before := time.Now(); before.Before(until); before = time.Now() {
				n, err := l.step(ctx, c, l.feeds[i])
				if err != nil {
					return err
				}
				counts[i] += n
				took[i] = append(took[i], time.Since(before))
			}
			return nil
		})
	}
	err := group.Wait()
	total := 0
	l.took = l.took[:0]
	for i, n := range counts {
		total += n
		l.took = append(l.took, took[i]...)
	}
	return total, err
}

// postgresql compares the service with a database used by hand.
func (b *bench) postgresql() (err error) {
	d, err := b.startDatabase()
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, d.stop()) }()
	fmt.Println("PostgreSQL", d.version(b.ctx))
	service, err := b.serve("against-postgresql")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, service.stop()) }()
	if err := declareAll(b.ctx, service, quantities); err != nil {
		return err
	}
	if err := b.againstSingles(d, service); err != nil {
		return err
	}
	return b.againstBatches(d, service)
}

// tables are how it keeps readings, the first one doing what the service does.
func tables() []string { return []string{"keyed", "numbered"} }

func (b *bench) againstSingles(d *database, service *process) error {
	ours, err := newRESTLoad(service.HTTP, "q", callers, 0)
	if err != nil {
		return err
	}
	defer ours.close()
	contenders := []contender{{"single REST posts to the service, callers: 64", ours.run, service}}
	var keyed *databaseLoad
	for _, table := range tables() {
		l, err := d.load(b.ctx, table, callers, false)
		if err != nil {
			return err
		}
		defer l.close()
		if keyed == nil {
			keyed = l
		}
		contenders = append(contenders, contender{"PostgreSQL (" + table + "), INSERT and UPDATE, callers: 64", l.run, nil})
	}
	r, err := b.alternate(contenders...)
	if err != nil {
		return err
	}
	fmt.Printf("  %-30s %v\n  %-30s %v (last turn)\n", "service", quantilesOf(ours.took), "PostgreSQL (keyed)", quantilesOf(keyed.took))
	b.ratio("single REST posts / PostgreSQL (keyed), 64 callers", r[0], r[1], 3)
	b.ratio("single REST posts / PostgreSQL (numbered), 64 callers", r[0], r[2], 3)
	return nil
}

func (b *bench) againstBatches(d *database, service *process) error {
	ours, err := newRESTLoad(service.HTTP, "b", 4, perMessage)
	if err != nil {
		return err
	}
	defer ours.close()
	stream, err := newStreamLoad(service.GRPC, "t", quantities)
	if err != nil {
		return err
	}
	defer stream.close()
	contenders := []contender{
		{"REST batches of 1,000 to the service, 4 connections", ours.run, service},
		{"gRPC stream to the service, 1,000 a message", stream.run, service},
	}
	connections := []int{1, 2, 4}
	for _, table := range tables() {
		for _, n := range connections {
			l, err := d.load(b.ctx, table, n, true)
			if err != nil {
				return err
			}
			defer l.close()
			contenders = append(contenders, contender{fmt.Sprintf("PostgreSQL (%s), COPY and one UPDATE, connections: %d", table, n), l.run, nil})
		}
	}
	r, err := b.alternate(contenders...)
	if err != nil {
		return err
	}
	for i, table := range tables() {
		theirs := r[2+i*len(connections):][:len(connections)]
		best := slices.MaxFunc(theirs, func(a, b series) int { return int(a.median() - b.median()) })
		b.ratio("gRPC stream / best batch form of PostgreSQL ("+table+")", r[1], best, 4)
		b.ratio("REST batch / best batch form of PostgreSQL ("+table+")", r[0], best, 0)
	}
	return nil
}
