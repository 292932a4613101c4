// Package match finds the two frames of each shot by their times and shot
// numbers. It is pure: no files, no clock, the same answer for the same
// frames in any order.
//
// # Rule
//
// Streak times are first brought to the reference clock,
//
//	t' = t + Offset + Drift·(t − Epoch),                                (1)
//
// and the gap of a streak and a reference frame is t_reference − t'. Two
// frames are candidates for each other if
//
//   - both carry a shot number: the numbers are equal, and if both carry a
//     time, |gap| ≤ Within;
//   - otherwise: both carry a time and |gap| ≤ Within.
//
// Shot numbers decide first. Among the rest, the assignment is one to one,
// keeps the order of time, and maximises
//
//	Σ over pairs ( Within − |gap| ),                                    (2)
//
// so a pair always beats two single frames, but two poor pairs do not beat
// one good one. On a line, uncrossing two pairs never makes Σ|gap| larger,
// so keeping the order costs nothing as long as numbers do not interfere.
//
// # When it is not sure
//
// A pair of that assignment is doubtful if either frame has a rival: another
// candidate whose |gap| is not at least Within/5 larger. Noise could then
// have chosen the other one. A rival that is itself in a sure pair does not
// count. Doubtful pairs and their rivals form groups, which are held for a
// person once the last frame of the group was seen Grace ago: until then
// a frame may still come that explains the others.
//
// Sure pairs are given at once, without waiting for better partners. That is
// right as long as Within is less than half the shortest interval between
// two shots, less the jitter of both clocks: then frames of different shots
// are never candidates. With a larger Within, a frame that comes late can
// find its partner taken by the neighbouring shot.
//
// A frame without a partner waits until it was seen Grace ago and is lone
// then. Nothing is remembered between calls: a lone frame that is passed
// again is paired if its partner has come.
//
// # Cost
//
// Candidates are found by sorting and two pointers; (2) is the heaviest
// chain of candidate pairs increasing in both indices, found with a Fenwick
// tree (Fenwick, Software: Practice and Experience 24, 1994). With n frames
// of which each has at most k candidates the cost is O(n·k·log n) time and
// O(n·k) memory; k is limited to MaxCandidates, and a cluster of frames
// with more is held as a whole.
package match
