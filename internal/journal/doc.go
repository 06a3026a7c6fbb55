// Package journal keeps what a robot must not forget: numbered records in a folder, appended and never changed.
//
// [Journal.Append] numbers a record and returns at once; [Journal.Sync] writes all that was appended and waits for the disk, so that
// one wait serves many records. What nobody may see before it is durable waits for the number that Sync returns.
//
// # Segments
//
// The records lie in segments, files named by an ordinal. Each states in its header the number of its first record and takes the
// place of whatever older segments have from that number on. A file is written only by the process that made it, and only until a
// write or a sync of it fails; then everything since the last successful sync goes again, into a new segment. So
//
//   - nothing that is on the disk is ever written over, cut or mended;
//   - after a failed sync nothing of what it was to save is trusted, wherever the error came from: a kernel that has dropped the
//     pages reports the next sync as a success;
//   - a full disk is no end: when there is room again the next Sync writes what had to wait;
//   - opening an old journal writes nothing, and works on a full disk.
//
// A segment gets its name when its header and its first records are durable.
//
// # Format
//
// All numbers are little-endian. A segment begins with 128 bytes:
//
//	0    8  "SELVJRNL"
//	8    2  version of the format, 1
//	10   6  zero
//	16  16  journal id
//	32   8  number of the first record; all before are durable
//	40   8  number of the last record that the segment had when it got its name
//	48   8  ordinal of the segment, as in its name
//	56  33  fleet: length, then the name, padded with zeros
//	89  33  robot: the same
//	122  2  zero
//	124  4  CRC-32C of what stands before
//
// Records follow:
//
//	0   4  CRC-32C of the journal id and of what follows
//	4   4  length of the payload
//	8   8  number
//	16  1  kind, 1 to 255 by the caller's choice; 0 for a mark, below
//	17  3  how many records back the newest durable one was when this one was appended; 0 when it does not say
//	20     payload
//
// A mark has the number of the record before it and says that this one is durable. Its payload is one byte: 0 when the journal was
// closed in good order, 1 when the survey is finished and nothing may follow.
//
// # Opening
//
// A record that states how far all was durable makes the difference between a tail that a crash has torn and damage. Bytes of the
// newest segment that are no record are a torn tail if nothing behind them says that they were durable: the records before them
// stand, the tail counts for nothing. Anything else that is not as it was written is a [Damage], which names file and offset; the
// journal does not open then and its files stay as they are. Whole records behind the last one known to be durable count, but may
// still be in memory only: they wait for the next Sync and go into the next segment again.
package journal
