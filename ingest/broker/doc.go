// Package broker is the one store of the program: the NATS server with
// JetStream, embedded in this process or remote, and on it the streams
// OBSERVATIONS, HELD and ALERTS and the bucket BOOKS.
//
// Open starts or reaches the store as the daemon does, with a lock on the data
// folder. Attach reaches the store of a daemon that is already running;
// OpenOrAttach does whichever is possible, for commands such as load or show.
// What is published is on disk when Publish returns. Follow reads a stream in
// order and comes back by itself after any interruption; Books keeps the
// changed parts of a computed state in atomic batches.
//
// Use it wherever something must outlive the process. Do not use it for what
// can be computed again from the streams, for questions across many keys (it
// is no database), nor in the detectors, which know nothing of storage.
//
// What a subject or a book means is not decided here. The limits and traps of
// the server that this package works around were measured; each is named at
// its line.
package broker
