// Package storage keeps inspections for good. A store is a folder with one writer:
//
//	catalogue.db         part types, calibrations, stations, manifest of volumes, cursors (package catalogue)
//	volume-00000001/     volumes in order of arrival, one of them open (package volume)
//	mark                 how far entries were acknowledged
//	lock                 held (flock) by the process that has the store; its content means nothing
//
// # What a commit does, in this order
//
//  1. the writer takes all submissions that are waiting; no timer, so a lone one does not wait for company
//  2. each id is looked up: the same content was recorded already (its first sequence is the answer), other content is refused
//  3. each entry gets the next sequence and is completed by its Prepare
//  4. samples of all entries: one transaction of the open volume's samples file, synced
//  5. records, index, counters, objects: one transaction of the records file, synced
//  6. the mark moves to the last sequence, synced
//  7. every submitter gets its answer
//
// A crash before 5 leaves at most samples without a record, whose sequences are not used again. A crash before 7 leaves entries that nobody
// was told of; sent again, they are found by their id. After a failed sync nothing more is acknowledged until Reopen has read the files
// anew from the disk: a second sync that succeeds proves nothing about the first.
//
// # Opening
//
// Nothing is believed: the lock is taken, the catalogue is checked, the mark is read, every volume of the manifest must be there with the
// size, id and range the manifest gives, the open volume is checked page by page and must reach the mark. A volume that fails is named.
// Damage to a closed volume is contained: its readers get the error, everything else works. Damage to the volume being written (or to one
// not yet closed) ends opening, because ids could no longer be looked up for certain; with SetAsideDamaged the writer instead leaves that
// volume as it is and goes on in a new one.
//
// # The mark
//
// 8192 bytes, two slots at 0 and 4096, written in turn:
//
//	"admitmrk", store id 16 bytes (from the catalogue), number of the write u64, volume u64, sequence u64, CRC-32C over all before u32
//
// Numbers are big-endian. The slot with the higher number holds; write n goes to slot n mod 2.
package storage
