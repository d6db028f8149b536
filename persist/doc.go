// Package persist keeps the ledger and the checkpoints in one bbolt file. It
// knows bytes, pages and syncs, and nothing of what a reading means.
//
// # Laws
//
//   - A group is acknowledged after fdatasync of its pages and then of the meta
//     page that leads to them. What isn't acknowledged no reader sees.
//   - The first failure of a commit ends the writing of a file. A full disk,
//     told by a write before anything was synced, may pass: open the file anew.
//     After anything else the disk may lack what memory shows, so a copy of
//     what was acknowledged takes the file's place; see Ledger.Salvage.
//   - Every value has a checksum that includes its key, and the groups are
//     chained by hashes. A value that fails is an error, never skipped.
//   - The file's name is durable before anything in it is acknowledged: Open
//     syncs the directory, whoever made the name. The names of the directories
//     above are the caller's to sync.
//
// # Premise
//
// A device writes a sector of 512 bytes whole or not at all. A meta page's 80
// bytes lie within one, so a power loss leaves both meta pages sound, the
// newer of them perhaps unwritten. Where a device tears even a sector, the file
// is refused as damaged, though the older meta page leads to a sound state: the
// torn one can't be told from one that was acknowledged and has rotted since.
//
// # Format, versions 1 to 3
//
// Version 2 is version 1 with what is marked (2), version 3 is that with what is
// marked (3).
//
// Numbers in keys are big-endian, so that they sort; all others little-endian.
// "varint" and messages are those of protobuf. crc is CRC-32C (Castagnoli).
//
//	bucket      key                          value
//	meta        "format"                     "leadline ledger\0", version as 4 bytes big-endian
//	meta        "sweep"                      sealed: segment 4, through 8, summary
//	head        "head"                       sealed: position 8, commit time 8, hash 32, swept 1, segment 4, through 8,
//	                                         and, if there are any, the number of instruments 4 (2)
//	ledger      position 8                   chunk, see below
//	instruments number 4                     sealed: position 8 of its latest record (2)
//	quantities  number 4                     sealed: message Quantity, see quantity.go
//	states      number 4                     sealed: through 8, state
//	segments    segment 4, number 4, chunk 4 sealed: rows, see below
//
//	sealed      version 1 | body | crc of key, version and body 4
//
// head says where the ledger ends, so that a loss there isn't taken for a
// shorter ledger. Its bucket lies within the root page, which every commit
// writes anyway. Rows of segments after that of the sweep belong to a sweep
// that was interrupted; they are deleted by the next commit of a new handle.
//
// The bucket of instruments is made with the first record of one, and a position
// is written in the transaction of the record that it leads to.
//
// A group of records is one or more chunks, each under the position of its
// first record, at most 996 bytes unless it has only one record:
//
//	offset bytes
//	 0      1    version, 1
//	 1      1    1: first chunk of a group, 2: further chunk
//	 2      2    records in this chunk
//	 4      4    bytes of these records
//	 8      8    commit time of the group, nanoseconds since 1970
//	             in a first chunk only:
//	16      4    records in the group
//	20      4    chunks of the group
//	24     32    hash of the group
//	             in any chunk:
//	16|56   4    crc of key and all of the header before it
//	20|60        records
//
//	hash = SHA-256(hash of the group before, or 32 zero bytes,
//	               then of each chunk: key 8 | header bytes 0 to 15 | records)
//
// A record is framed as
//
//	varint length of body | crc of body 4 | body
//
// and its body is a message. Fields marked * are left out where they say what
// the record before said in the same chunk; before the first record stands
// number 0, revision 1, the commit time for both times, and empty texts. All
// others are left out where they are zero or empty.
//
//	 1  varint  kind: 0 reading, 1 refusal, 2 declaration, 3 retirement,
//	            4 instrument (2), 5 renewal (2), 6 step (3)
//	 2* varint  number of the quantity
//	 7* sint64  receive time, as a difference
//	 8* string  principal
//	 9* string  request ID
//	10* varint  revision
//	            of readings and refusals:
//	 3  double  value
//	 4* sint64  time, as a difference
//	 5  varint  1 if the time wasn't sent
//	 6  string  reading ID
//	11  double  random standard uncertainty; there if it was sent, also if 0
//	12* string  instrument
//	13* string  unit
//	14  varint  reason: its place in engine.ReadingReasons, from 1
//	15  string  detail
//	16  varint  position of the refusal put through
//	17  string  quantity ID, if it has no number
//	18  string  reason, if it isn't in that list
//	21* string  occasion (2)
//	24  varint  extent: 1 above the value, 2 below it, 3 between it and upper (3)
//	25  double  upper (3)
//	26  varint  number of samples that the value is a mean of (3)
//	            of declarations and retirements:
//	19  string  quantity ID
//	20  message Declaration, see quantity.go, repeatability.go, dynamics.go and
//	            model.go; its fields of slope, wander, mean, half-life and
//	            horizon are (2), those of floor, outliers, scale, model check
//	            and step detection (3)
//	            of instruments:
//	22  message Instrument, whole, see instrument.go (2); its field of a
//	            learned repeatability is (3)
//	            of renewals, and of what withdraws one:
//	23  message Renewal, whole, see renewal.go (2)
//	            of steps:
//	27  message StepEvent, see model.go (3)
//
// The rows of a chunk, in canonical order:
//
//	rows 1 | scale 1 | earliest time 8 | latest time 8, then of each row
//	if its extent, upper or samples aren't those of the row before (3):
//	   control 1: bits 0 and 1 extent, bit 2 has an upper, bit 3 the samples
//	              change, bits 4 to 7 the number 9
//	   if the samples change: varint
//	   with an upper: control 1 | n bytes, as for an uncertainty
//	control 1: bit 0 has an ID, bit 1 has an uncertainty, bit 2 reversed,
//	           bit 3 has an origin (2), bits 4 to 7 n
//	sint64 varint: time less that of the row before (of the first: earliest), in units
//	               of 1 s, 1 ms, 1 us or 1 ns by scale 0 to 3
//	sint64 varint: position less that of the row before
//	with an origin (2): varint: twice the number of the instrument, and 1 if the
//	               occasion changes; then the hash of the occasion 8
//	n bytes: the value's bits xor those of the row before; reversed: byte by byte
//	with an uncertainty: control 1 (bits 2 and 4 to 7) | n bytes, likewise
//
// A row without an origin has that of the row before; before the first stands
// instrument 0, occasion 0. So rows that name none are those of version 1. Likewise
// before the first stand extent, upper and samples 0, and no control byte of
// versions 1 and 2 holds the number 9, so rows of plain values are those of version 2.
// An upper's bits are xored with those of the row before, 0 if that has none.
//
// # Upgrades
//
// A reader skips fields of messages that it doesn't know, so fields may be
// added, under new numbers, while the version stays; so may words at the end
// of engine.ReadingReasons, though an older program then can't read records
// that use them. Any other change takes a new version: of a chunk or sealed
// value if the rest can be read without it, of the file if not. A program
// reads all versions up to its own and refuses newer ones with ErrNewer,
// without touching the file. testdata/format1.golden holds the bytes of
// version 1, format2.golden those that version 2 adds, format3.golden those that
// version 3 adds.
//
// A file begins as version 1 and becomes a later one with the first record that
// needs it, and never an earlier one again:
//
//	2  an instrument; a renewal; a reading with an occasion; a declaration with
//	   a linear trend, mean reversion or a horizon
//	3  a reading with an extent or a number of samples; a declaration with a
//	   floor, outliers, a logarithmic scale, a model check or a step detection;
//	   an instrument with a learned repeatability; a step
//
// So a program that writes version 3 goes on with a file of version 1 or 2 as it is.
// A program that knows only those may take it back until then, and from then on
// refuses it with ErrNewer, as it would believe something else.
//
// # Damage
//
// bbolt has no checksums but those of its two meta pages, and believes what it
// finds in a page. So Open first reads, by itself, the meta pages, the branch
// pages and the list of free pages, and then verifies the groups after the
// last sweep; Replay, Records and Rows verify what they read; Verify reads
// everything. Not found before Verify or a read: damage to an old group, or to
// the 16 bytes of header of a leaf page.
//
// Checksums don't tell what is missing. The lack of a group shows in positions
// and hashes. A sweep writes the first state of a quantity together with its
// declaration, number by number, so Checkpoint finds the lack of either, and of
// a number within. That of the last number, and of rows, only Verify finds: it
// compares the rows of complete segments with the readings that the sweep
// includes, but for instrument and occasion: how those are numbered and hashed is
// the engine's. Instruments finds a number that lacks, or a position
// of another instrument's record; Verify compares the bucket with the ledger.
//
// # Choices
//
//   - Free pages are listed in the file (no NoFreelistSync): one page more per
//     commit, but Open needn't scan the file, and bbolt's scan ends the process
//     when it meets damage. The list stays short: appended groups use it up.
//   - Chunks, not one key per record: fewer keys are sorted and copied by bbolt,
//     and the file is smaller. Not one value per group: values above a page cost
//     whole pages.
package persist
