// Package daemon is the service: it wires the drop folders, the pairing, the
// ledger, the workers and the page together, and stops them in order.
//
// # The way of a shot
//
// watch reports a whole, quiet file; its stamp is read (never its pixels) and
// the frame enters the ledger. match pairs the frames that have no partner yet;
// each decision is one transaction of the queue, which then starts the worker.
// The worker runs a child process of this same program, which reads both
// frames, reconstructs, measures and publishes the result folder by a rename;
// only then is the shot marked done. A frame that crashes the reader costs one
// attempt of one shot.
//
// # Stopping
//
// The context ends: folders are no longer watched and no job is started;
// running children may finish for the configured time, then their standard
// input is closed and they end without publishing; the page goes last. An
// interrupted job goes back to the queue untouched.
//
// # Memory
//
// Every job states how much memory it will need (pipeline.Bytes); the sum over
// the running children stays within the configured budget. A job larger than
// the whole budget runs alone.
package daemon
