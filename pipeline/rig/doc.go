// Package rig simulates a station: one streak camera behind a code and one
// reference camera looking at the same scene. It makes the calibration series,
// single shots and whole campaigns, with the truth of every shot, and things
// that go wrong.
//
// It is a second opinion about the physics, so it shares no code with the
// reconstruction and is finer than its grid.
//
// # Model
//
// The scene is a function L(x, y, t), photoelectrons per window pixel area
// and ps as the streak arm counts them with the code open and a flat of 1.
// Pixel centres lie at integers, row 0 on top, arrays are row-major. The
// turned frame is used throughout: later light lands further down. Only
// frames given out (Image) are in the raw orientation of the sensor.
//
// The sweep displaces light by
//
//	s(t) = (T-1)·(u + q·(u²-u) + c·(u³-u)),   u = t/Span                      (1)
//
// pixels, s(0) = 0: light at t = 0 lands where it lands with the sweep off.
// Frame k of a reconstruction with s₀ = 0 lasts from s⁻¹(k-½) to s⁻¹(k+½).
// Light is let in while -½ ≤ s ≤ T-½; at other times both arms are dark.
//
// The light on the streak sensor at a flat of 1, pixel (X, Y), is
//
//	E(X,Y) = ∫ dt ∬_window C(x,y) L(x,y,t) g_s(X - x - X₀, Y - y - Y₀ - s(t))  (2)
//
// with the code C, area averages of square elements of any pitch, the window
// at (X₀, Y₀), and g_s the Gaussian blur integrated over the pixel. Nothing
// passes beside the window. On the reference sensor it is
//
//	R(X,Y) = a ∫ dt ∬_field L(x,y,t) g_r((X,Y) - h(x,y))                       (3)
//
// with the throughput ratio a and the homography h from the window to the
// reference sensor; the light of an area goes with it, whatever h stretches.
//
// A sensor turns light v into codes by
//
//	n ~ Poisson(v·flat + dark),  n ← min(n, full well),  n ← n·(1 - bend·n/full well)
//	code = round((n + read·N(0,1)) / gain + offset), clipped to 0 … 2^bits - 1   (4)
//
// with fixed flat (vignetting and speckle, mean 1), offset pattern, hot pixels
// (dark signal of 1 to 11 % of full well) and dead pixels (response under
// 0.3). This is the linear camera model of EMVA Standard 1288, Release 4.0
// Linear, section 2, with a full well and, if asked for, a bend. A streak
// tube's own multiplication noise, blooming and smear are left out.
//
// # Discretisation
//
// Place is cut into 4×4 cells per window pixel, time into steps during which
// the sweep moves a quarter pixel: their lengths follow (1). L is taken at the
// middle of cell and step, and displaced by s at the middle of the step. The
// blur makes the integrand of (2) smooth in s on the scale of a pixel, so that
// this midpoint rule is exact to rounding for light that changes smoothly.
// Blurs are exact integrals of a Gaussian over each pixel, cut at 6 σ; a
// cell's own extent h = 1/4 px is added as variance h²/12, which is right for
// even light behind code edges and 0.5 % of a width of 0.7 px too much for a
// smooth scene behind an open code. The
// pulses of the sweep series are not on that grid: they are displaced by s(t)
// itself. A reconstruction that uses one code value and one frame per pixel
// of sweep therefore sees, as a real one does, structure it does not model:
// code edges inside a pixel, motion within a frame, a sweep that bends within
// a frame, and a reference view resampled by no cubic kernel.
//
// Truth integrates L by Gauss-Legendre rules over whole pixels and frames,
// independent of the cells above.
//
// # Series and campaigns
//
// WriteSeries films everything a calibration needs: dark frames, pairs of
// flats in even light on the whole sensor, the code and the open window in
// even light (which leans by Tilt from edge to edge, as real light does), a
// target of discs and bars, and short pulses at known delays with the sweep
// on. WriteCampaign drops shots into folders as two cameras would, with the
// faults asked for, and keeps their truth in a folder of its own:
// station.json and code.npy about the station, shot_000001.json (Record) and,
// if asked for, the exact cube shot_000001.npy about every shot.
//
// # Cost
//
// A shot evaluates L at up to 16·4·H·W·T places, only where a scene says it
// may be lit: about 0.1 to 0.3 s for 64×64×32 and 0.5 to 1.5 s for
// 128×128×64 on one core; a series takes 0.3 and 2 s. Everything is
// single-threaded, a Station may be used by several goroutines, and the same
// seeds give the same bits on the same machine.
package rig
