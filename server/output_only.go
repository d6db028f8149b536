package server

import (
	"fmt"
	"strconv"

	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
)

// declared is what a message of a quantity or an instrument has beside its
// declaration.
type declared interface {
	GetId() string
	GetRevision() uint32
	GetEtag() string
	GetCreateTime() *timestamppb.Timestamp
	GetUpdateTime() *timestamppb.Timestamp
	GetRetireTime() *timestamppb.Timestamp
}

// checkOutputOnly lets a declaration carry what the service itself answers
// with, if it is still so: what was read can be changed and sent back. The
// condition is tightened to what was compared with. read returns what is there,
// an empty message for nothing.
func checkOutputOnly(id string, given declared, read func() declared, c *engine.Condition) error {
	if given.GetId() != "" && given.GetId() != id {
		return refuse(engine.InvalidField, "id", fmt.Sprintf("id is %q, not the %q of the request; leave it out", shorten(given.GetId()), id))
	}
	if given.GetRevision() == 0 && given.GetCreateTime() == nil && given.GetUpdateTime() == nil && given.GetRetireTime() == nil {
		return nil
	}
	present := read()
	// An ETag that is no longer true says it best.
	if c.IfMatch != "" && c.IfMatch != "*" && c.IfMatch != present.GetEtag() {
		return nil
	}
	if given.GetRevision() != 0 && given.GetRevision() != present.GetRevision() {
		return notSettable("revision", strconv.FormatUint(uint64(present.GetRevision()), 10))
	}
	for _, t := range [...]struct {
		field          string
		given, present *timestamppb.Timestamp
	}{
		{"create_time", given.GetCreateTime(), present.GetCreateTime()},
		{"update_time", given.GetUpdateTime(), present.GetUpdateTime()},
		{"retire_time", given.GetRetireTime(), present.GetRetireTime()},
	} {
		if differs(t.given, t.present) {
			return notSettable(t.field, presentTime(t.present))
		}
	}
	if c.IfMatch == "" && present.GetRevision() != 0 {
		c.IfMatch = present.GetEtag()
	}
	return nil
}

// differs tells whether a given time is another than the present one.
func differs(given, present *timestamppb.Timestamp) bool {
	return given != nil && (present == nil || !given.AsTime().Equal(present.AsTime()))
}

func presentTime(t *timestamppb.Timestamp) string {
	if t == nil {
		return "absent"
	}
	return string(appendTime(nil, t.AsTime()))
}

func notSettable(field, present string) error {
	return refuse(engine.InvalidField, field, fmt.Sprintf("%s is set by the service, and is %s at present; leave it out", field, present))
}
