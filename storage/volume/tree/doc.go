// Package tree reads the files of bbolt (format version 2, 4096-byte pages, little-endian) page by page, and believes none of them.
//
// bbolt itself maps a file into memory and follows whatever it finds there: a truncated file or a flipped bit in an element table ends
// the whole process with a memory fault, a page that points to its own parent ends it with an exhausted stack, and a branch page that
// lost an entry makes keys silently absent. This reader takes pages through a Source, checks each one before using it, and turns
// every contradiction into a *damage.Error naming the page. It never writes; bbolt does.
//
// What is checked on the way to every key:
//   - a page says it is the page that was asked for, is of a tree kind, and lies below the high-water mark
//   - elements are where bbolt writes them: keys and values follow the element table without gap or overlap, so a changed count, position
//     or size cannot go unnoticed
//   - keys ascend within a page, and the first key of a page is the key its parent knows it by; a seek that ends behind the last key of a
//     page also looks at the next page. Together they make an answer "absent" as certain as a found key
//   - depth is bounded, so no loop of pages can trap the reader
//
// Contents of values are not judged here: that is the envelope's part.
//
// Layout of a page, as bbolt writes it:
//
//	0..7 page id   8..9 kind (1 branch, 2 leaf, 4 meta, 16 free list)   10..11 count   12..15 overflow pages that follow
//	leaf element   flags u32 (1: the value is a bucket), position u32 (from the element's own start), key size u32, value size u32
//	branch element position u32, key size u32, child page u64
//	bucket value   root page u64, sequence u64, and when root is 0 a whole leaf page inline
//	meta (page 0 and 1, after the 16-byte page header)
//	               magic u32, version u32, page size u32, flags u32, root page u64, root sequence u64,
//	               free list page u64, high-water page u64, transaction u64, FNV-64a of the 56 bytes before it u64
package tree
