// Package detectors is one stand's account and what it says: day values in,
// findings out. It is pure: no clock, no input or output, no log, no
// goroutine. The same days give the same account, to the bit, whether they
// come one by one, all at once, or after a restore.
//
// The science is in the sub-packages (climate, ledger); this package puts one
// day together, keeps the years, and decides when a condition holds. Whether
// anybody is told is decided in alerts.
package detectors
