// Package pagefile joins bbolt, which writes a file, with package tree, which reads it without trusting it.
//
// A File is open for writing: it was checked as a whole before bbolt mapped it, writes go through bbolt transactions, reads pin a bbolt
// read transaction and take pages by ordinary reads of the file, so that no damage can become a memory fault. A Still is a file that
// nobody writes any more: each read opens it, checks and reads pages, and closes it again, so hundreds of them cost no descriptors.
//
// Both give read access as View, with a reader that is valid during the call. A View must be short: while it lasts, bbolt cannot reuse
// pages and the file grows. OldestRead is the gauge that shows one that is not.
package pagefile
