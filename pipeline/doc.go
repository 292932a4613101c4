// Package pipeline takes one shot from its two frame files to a cube, its
// numbers and a verdict.
//
// The stages, each timed and logged: load the bundle, read and hash both
// files, turn and correct the frames, cut out the parts the
// model speaks of, reconstruct, measure. Nothing is written; the caller
// publishes the Result.
//
// Errors tell the caller what to do: IsPermanent reports a fault that another
// try cannot mend, such as a file that is no image or a frame of the wrong
// shape. Everything else may pass.
//
// # Time axis
//
// Frame k of the cube is the light that the sweep put at displacements
// s_0 + k − ½ to s_0 + k + ½ streak pixels (times n for a cube n times coarser);
// its limits and centre in ps are the calibrated sweep curve's inverse there.
// Two further frames before and after the span take up light that falls there;
// they are cut off again and their share of the light is reported.
package pipeline
