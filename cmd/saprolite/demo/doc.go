// Package demo is an invented forest on an invented island, with invented
// weather: what the demonstration and the end-to-end tests run on. No place,
// person or measurement in it is real, and nothing may be concluded from it.
package demo
