// Package daybook folds one source's observations into day values by the
// source's own day, and keeps them for ever, one page per source and year.
//
// A Book holds observations by the time they speak for, not by the time they
// arrived: the same observations in any order and repetition give the same
// pages, to the bit (design 4.2). A late or revised observation revises its
// day. A Book is not safe for concurrent use; one engine owns it.
//
// Use it for everything between the gate and a stand. Do not use it for
// values that a stand computes: those are made again from the pages whenever
// they are needed.
package daybook
