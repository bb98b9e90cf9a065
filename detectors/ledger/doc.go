// Package ledger keeps a stand's account of water, one day at a time: how far
// its store is drawn down, what its canopy holds, what runs over. And it says
// how deep the store may be drawn (the storage limit), from past years.
//
// The deficit is 0 at drained full and grows as the trees drink; what falls on
// a full store overflows and leaves the account. Water is neither made nor
// lost: see Flux.
//
// Use it with a day's rain and either a measured or a reference
// evapotranspiration (package climate). Do not use it for what is not known: a
// day without rain data is not a dry day, and the account then stands still.
// It does not say how sure the deficit is.
package ledger
