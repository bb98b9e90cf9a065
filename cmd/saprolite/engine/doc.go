// Package engine is the one loop: messages in order in; pages, heads and
// messages to people out. The daemon, the demo, the hindcast and the tests
// all run it.
//
// Time enters as messages too: nothing here reads a clock, so that the same
// messages make the same books. An Engine is not safe for concurrent use.
package engine
