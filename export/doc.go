// Package export publishes the result of a shot as one folder.
//
// # The folder
//
//	cube.nxs       the cube, HDF5 in the NeXus layout (package nexus)
//	metrics.json   verdict, quantities, curves, provenance, and the size and
//	               SHA-256 of every other file; see [Schema]
//	contact.png    frames side by side on one colour scale
//	movie.png      all frames as an animated PNG
//	light.svg      light over time with peak and width
//	arrival.png    when the light of each pixel arrives
//	residual.png   what the cube leaves unexplained in each arm
//	log.jsonl      the stages of the run
//	versions/      older results, each a folder like this one
//
// # Whole or not at all
//
// [Publish] builds the folder beside its place under a hidden name that no
// other process or attempt uses, syncs every file, and renames. With D the
// place, T an unused token and an arrow for one atomic rename:
//
//	1  .D.T.partial is filled and synced       D is the old result
//	2  .D.T.partial -> .D.T.ready              D is the old result
//	3  D -> .D.T.previous                      D is missing for a moment
//	4  .D.T.ready -> D                         D is the new result
//	5  .D.T.previous/versions/* -> D/versions  D is the new result
//	6  .D.T.previous -> D/versions/n-bundle    D is the new result
//
// Without an old result, steps 3, 5 and 6 fall away. A crash before 3 leaves
// the old result in place and a leftover that [Sweep] removes; between 3 and 4
// both results are whole under hidden names, and Sweep finishes step 4; after
// 4 the new one is in place, and Sweep, or the next Publish, files the old.
// No step copies or rewrites a file of an older result. Invariant: no old
// version is ever removed by name alone; a folder is removed only under the
// name .partial, which it gets by a rename after it was decided to be garbage.
//
// The rejected alternatives: moving the old result into the new folder before
// the swap leaves a moment with half an old result in place; a symbolic link
// to the current version does not exist on the Windows shares that matter.
//
// # What replaces what
//
// A result's identity is its pass and its bundle. The old result is kept under
// versions/ if it was made with another bundle and is not a quick look;
// otherwise the new one replaces it. A quick look never replaces a finer
// result of the same bundle. Files in the folder that are not ours are carried
// over to the new one, never removed.
package export
