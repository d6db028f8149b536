package main

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"time"

	"google.golang.org/protobuf/encoding/protowire"
)

// quantities is how many quantities most comparisons are about: of ten, seven
// walk at random and three are constant with a repeatability to be learned.
const quantities = 10_000

// quantityID names the ith quantity.
func quantityID(i int) string {
	return fmt.Sprintf("hall-%02d.line-%03d.point-%05d", i/1000%100, i/50%1000, i)
}

func walks(i int) bool { return i%10 < 7 }

// feed is a gateway: it makes readings of its own quantities, their times going
// forward, each with an ID of its own.
type feed struct {
	name   string
	ids    []string
	random *rand.Rand
	n      uint64
	at     time.Time

	quantity string // of the reading at hand, like all below
	value    float64
}

// newFeeds shares the first total quantities among n feeds.
func newFeeds(label string, total, n int) []*feed {
	feeds := make([]*feed, n)
	for i := range feeds {
		feeds[i] = &feed{
			name:   fmt.Sprintf("%s%d-", label, i),
			random: rand.New(rand.NewPCG(7, uint64(i))),
		}
	}
	for i := range total {
		f := feeds[i%n]
		f.ids = append(f.ids, quantityID(i))
	}
	return feeds
}

// begun is when this process began.
var begun = time.Now()

// catchUp moves a feed's clock to the present one of all feeds: it runs faster
// than any feed can, from weeks ago, so that a load that has its turn after
// another on the same quantities sends later readings, not late ones.
func (f *feed) catchUp() {
	const faster = 2000
	now := begun.Add(-21*24*time.Hour + faster*time.Since(begun)).Truncate(time.Second)
	if f.at.Before(now) {
		f.at = now
	}
}

// next makes a reading.
func (f *feed) next() {
	f.n++
	f.at = f.at.Add(time.Millisecond)
	f.quantity = f.ids[f.random.IntN(len(f.ids))]
	f.value = float64(f.random.IntN(400))/100 - 22
}

func (f *feed) appendID(b []byte) []byte {
	b = append(b, f.name...)
	for n := uint64(1e9); n > max(f.n, 1); n /= 10 {
		b = append(b, '0')
	}
	return strconv.AppendUint(b, f.n, 10)
}

// appendProto writes the next reading as a leadline.v1.Reading, behind its tag
// in a message that has readings as field number.
func (f *feed) appendProto(b []byte, number protowire.Number) []byte {
	f.next()
	var body [160]byte
	r := body[:0]
	r = protowire.AppendTag(r, 1, protowire.BytesType)
	r = protowire.AppendString(r, f.quantity)
	r = protowire.AppendTag(r, 2, protowire.Fixed64Type)
	r = protowire.AppendFixed64(r, math.Float64bits(f.value))
	var stamp [32]byte
	t := protowire.AppendTag(stamp[:0], 1, protowire.VarintType)
	t = protowire.AppendVarint(t, uint64(f.at.Unix()))
	t = protowire.AppendTag(t, 2, protowire.VarintType)
	t = protowire.AppendVarint(t, uint64(f.at.Nanosecond()))
	r = protowire.AppendTag(r, 3, protowire.BytesType)
	r = protowire.AppendBytes(r, t)
	var id [48]byte
	r = protowire.AppendTag(r, 7, protowire.BytesType)
	r = protowire.AppendBytes(r, f.appendID(id[:0]))
	b = protowire.AppendTag(b, number, protowire.BytesType)
	return protowire.AppendBytes(b, r)
}

// appendJSON writes the next reading; named says whether the quantity is in
// it. f.quantity then is the one to put into the path.
func (f *feed) appendJSON(b []byte, named bool) []byte {
	f.next()
	b = append(b, '{')
	if named {
		b = append(append(append(b, `"quantity":"`...), f.quantity...), `",`...)
	}
	b = strconv.AppendFloat(append(b, `"value":`...), f.value, 'f', -1, 64)
	b = f.at.UTC().AppendFormat(append(b, `,"time":"`...), time.RFC3339Nano)
	b = f.appendID(append(b, `","reading_id":"`...))
	return append(b, `"}`...)
}

// appendBatch writes a body of n readings.
func (f *feed) appendBatch(b []byte, n int) []byte {
	b = append(b, `{"readings":[`...)
	for i := range n {
		if i > 0 {
			b = append(b, ',')
		}
		b = f.appendJSON(b, true)
	}
	return append(b, "]}"...)
}
