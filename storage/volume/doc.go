// Package volume keeps one volume: a numbered span of the store, in order of arrival. What it keeps is opaque to it: records with index
// terms, counters, shared objects and sample blocks, all bytes. A volume is complete evidence: it can be copied alone and read with
// nothing else at hand.
//
// # Life
//
// A volume is open while it is written (Append), retired when writing has moved on (Retire), and closed once every page has a checksum
// (Seal). An open volume is checked as a whole when it is opened; a closed one is checked page by page whenever it is read.
//
// # Folder
//
//	volume-00000001/      number of the volume, eight digits
//	    records.db        bbolt: records, index, counters, objects
//	    samples.db        bbolt: sample blocks; committed before the records that name them; retention may drop it
//	    terms.filter      of a closed volume: which terms it may hold
//	    pages.crc         of a closed volume: checksum of each page of both bbolt files; its presence makes the volume a closed one
//
// It is made as .volume-00000001.new and renamed. Both bbolt files (format 2, see package tree) have 4096-byte pages and only top-level
// buckets, each of which exists from the start, but for "revisions", which appears with the first entry.
//
// # Values
//
// Every value is wrapped as package envelope draws: CRC-32C over bucket, key and value; schema number; revision number; content. Numbers
// below are big-endian unless called varint (unsigned) or signed varint (zigzag), both as in package encoding/binary. "bytes" is a varint
// length and that many bytes. ns are nanoseconds since 1970 UTC as signed 64 bits.
//
//	bucket     key                                    content
//	-------    -----------------------------------    -------------------------------------------------------------
//	records.db
//	meta       "volume"                               number u64, id 16 bytes (random), created ns
//	meta       "state"                                records u64, first sequence u64, last sequence u64, first tested ns, last tested ns,
//	                                                  highest sequence with samples u64, time open for writing (ns, a duration) u64
//	records    sequence u64                           tested ns, content hash 32 bytes, payload bytes,
//	                                                  varint n, n × (term name bytes, term value bytes),
//	                                                  varint n, n × (counter key bytes, varint m, m × signed varint),
//	                                                  varint n, n × (object kind bytes, hash 32 bytes),
//	                                                  varint n, n × (sample index varint, length varint, CRC-32C of the block u32)
//	terms      esc(name) esc(value) sequence u64      nothing
//	counters   the counter's key                      varint m, m × signed varint: sum of all deltas of the volume
//	objects    kind length u8, kind, SHA-256          the object
//	revisions  number u32, from 1                     text of the software revision
//	samples.db
//	meta       "volume"                               as in records.db, equal to it
//	samples    sequence u64, index u32                the block
//	revisions  number u32, from 1                     text; numbers are the file's own
//
// esc writes a zero byte as 00 ff and ends with 00 01: keys then sort by name, value and sequence, whatever bytes these hold.
//
// A sample block that holds one array of numbers is: method u8, varint n, data. Methods: 1 n little-endian float64; 2 zstd frame of the same,
// each XOR the one before, bytes shuffled; 3 n little-endian float32; 4 zstd frame of the same, bytes shuffled (first bytes of all numbers,
// then second bytes, ...).
//
// # Sidecars of a closed volume
//
//	pages.crc      blocks of 4096 bytes, the last 4 of each the CRC-32C over block number u64 and the 4092 bytes before
//	  block 0      "admit page sums\n", format u32 = 1, volume number u64, volume id, pages of records.db u64, pages of samples.db u64, zeros
//	  then         CRC-32C u32 of each page of records.db, 1023 a block, the last block filled with zeros; then the same of samples.db
//	terms.filter   block of 4096 bytes as above, then blocks of 64 bytes: 60 bytes, CRC-32C over (block number + 1) u64 and the 60 bytes
//	  block 0      "admit filter  1\n", volume number u64, volume id, number of blocks u64,
//	               varint n, n × (term name bytes, u8 1, lowest value bytes, highest value bytes | u8 0 when the volume has none), values
//	               cut to 64 bytes
//	  then         for each term of a filtered name: h = SHA-256(esc(name) esc(value)); block = h[0:8] mod blocks; bits h[8:10] mod 480, ...,
//	               h[22:24] mod 480; bit b is in byte b/8, value 1 << b%8
//
// # Invariants
//
//   - sequences ascend with every commit; a number whose samples were written without its record is never used again
//   - the records file never names samples that were not synced before it
//   - each record carries its own terms, deltas, and references: index and counters can be recomputed from records, and Verify does
//   - nothing is ever deleted from a volume; only counters and "state" are rewritten
package volume
