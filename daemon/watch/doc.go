// Package watch turns a drop folder into a stream of whole, quiet files.
//
// # What it promises
//
// A file is given once for each content, where content means size and
// modification time together, and only after both have been seen unchanged
// for the time Quiet, on this computer's monotonic clock. A modification
// time is compared with nothing but the same file's earlier one, so the
// clocks of other computers do not matter. A file without bytes is given
// after the time Longest, so that somebody reports it. A file that stays
// open but unchanged for Quiet is given; if it goes on growing, it is given
// again when it is quiet again. A file that vanishes before is forgotten.
//
// Notifications are hints, the folder is the truth. The folder is listed at
// the start, every Rescan, when notifications were lost and when it comes
// back after it was missing. A share that sends no notifications works too,
// only later. Listing reads names; size and time are asked for new and
// unsettled names, for names a notification mentions, and for a few settled
// ones after each listing, so that a replaced file is found in the end even
// if nobody said so.
//
// Names that begin with ".", "~" or "$" or end like temporary files, and
// everything named *.shot (our own result folders), are not looked at.
// Symbolic links are not followed, and os.Root keeps every access inside
// the folder.
//
// # How it works
//
//  1. Run is one goroutine that owns all state. It never touches the disk.
//  2. Disk work is done as tasks (list these folders, ask for these sizes),
//     each in a goroutine of its own, one at a time. Adding a folder to the
//     notifications is disk work as well.
//  3. The result of a task comes back through a channel with room for it,
//     so that a task never waits for Run.
//  4. If no disk call of a task returns for a while, the watcher says stuck
//     and keeps waiting for it: a second task would only get stuck as well.
//     When ctx ends, Run waits shortly for the task and then returns without
//     it. Its goroutine ends when the share answers; nothing can end it
//     before.
//
// Rejected: trusting notifications alone (they overflow, and shares have
// none); a pool of disk workers for each folder (a hung share would take
// them all).
package watch
