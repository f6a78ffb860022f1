// Package catalogue keeps what the whole store shares: part types, calibrations, stations, the manifest of volumes, and cursors. It is one
// bbolt file, catalogue.db, in the store's folder, checked as a whole when it is opened. Contents are opaque, but for the manifest.
//
// Part types and calibrations are immutable: the same bytes again are welcome, other bytes under the same name are refused. Stations come
// from the server's configuration and are replaced as a set.
//
// # Layout
//
// Pages, buckets and values are as in package volume: 4096-byte pages, top-level buckets, every value in an envelope (CRC-32C over bucket,
// key and value; schema; revision; content). Numbers are big-endian, ns are signed nanoseconds since 1970 UTC.
//
//	bucket        key                          content
//	-------       --------------------------   -----------------------------------------------------------------------
//	meta          "store"                      store id 16 bytes (random), created ns
//	part-types    name, 00, version u32        the part type
//	calibrations  id                           the calibration
//	stations      name                         what the configuration says of it
//	manifest      volume number u64            volume id 16 bytes, stage u8 (1 open, 2 retired, 3 closed, 4 set aside), samples kept
//	                                           u8 (0 or 1), created ns, time open for writing u64 (ns), records u64, first sequence u64,
//	                                           last sequence u64, first tested ns, last tested ns, bytes of records.db u64, of samples.db u64
//	cursors       name                         whatever its owner keeps there
//	revisions     number u32, from 1           text of the software revision
//
// The manifest row of an open volume has only number, id, stage and creation; the rest is set when it is closed.
package catalogue
