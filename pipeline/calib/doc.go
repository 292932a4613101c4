// Package calib makes, keeps and applies the calibration of a station.
//
// [ReadSeries] reads what was filmed, [Calibrate] turns it into a [Bundle],
// [Bundle.Save] writes it as a folder that is never changed again, [Find] and
// [Load] get it back, and [Arm.Correct] applies it to a frame.
//
// # Coordinates
//
// Pixel centres lie at integers, row 0 is at the top, arrays are row-major.
// Streak frames are turned once on reading so that later light lands further
// down; the reference arm is never turned. The registration h maps a window
// pixel (x, y) to a position on the reference sensor.
//
// # The model that is fitted
//
// With the sweep off and L the light in the window before blur,
//
//	open    = K_s ∗ (A · L)            A: 1 inside the window, 0 outside
//	coded   = K_s ∗ (C · L)            C: the code
//	target  = K_s ∗ S  and  a · K_r ∗ S(h⁻¹) / |J|
//
// K = tri ∗ g_σ is the kernel of package optics: a scene constant over pixels,
// a Gaussian point spread, a sensor that integrates over pixels.
//
// # Steps
//
// Arms (arm.go, transfer.go, pixel.go). Dark is the mean dark frame, read
// noise the temporal variance of the dark frames. Gain comes from the photon
// transfer of EMVA Standard 1288, Release 4.0 Linear: half the variance of
// the differences of pairs against their mean, a line through the dark point
// over 0 to 70 % of saturation. Repeated frames of steady light (open, coded,
// target, even) join as further pairs where they agree with the flats. The
// flat is the sum of all unsaturated flats over its mean in the lit part, its
// pixel-to-pixel part shrunk by the share of the photon noise. A pixel is
// hot if its dark level stands 8 robust standard deviations and 5 read noises
// off its 5×5 surroundings, noisy if its temporal variance is 4 times the
// usual and beyond what chance gives one pixel in 10⁹, odd if its response is
// 8 robust standard deviations and 10 % off its surroundings.
//
// Window (window.go): the rectangle in which the open frames exceed half of
// the plateau near each side. A symmetric blur does not move that point.
//
// Blur and code (edge.go, pattern.go, element.go, pitch.go, code.go). The
// spread of the window's sides gives the blur without knowledge of the code.
// The code is a pattern of two levels on a grid of elements of any pitch and
// phase; pattern, grid and blur are fitted together, and the two estimates of
// the blur are combined by their uncertainties. The code in the bundle is
// that pattern averaged over pixels, moved towards the measured frames by as
// much as the pattern fails to explain them. A code without two levels is
// restored pixel by pixel instead.
//
// Registration (coarse.go, align.go, register.go). A search over quarter
// turns, mirror, ±20° and scales 0.6 to 1.65 by masked normalised
// cross-correlation finds candidates; Gauss–Newton steps that maximise the
// correlation refine them from coarse to fine. For the last step each target
// is blurred by the blur of the other arm, so that both are blurred alike;
// the blur of the reference arm is the one for which they then agree best. A
// homography replaces the affine map if an F test at P < 0.001 asks for it and
// it moves a corner by more than 0.02 px.
//
// Throughput ratio (ratio.go): reference photoelectrons times the Jacobian
// over streak photoelectrons, in the inner part of the window.
//
// Sweep (spot.go, curve.go, delays.go): all delays show one common profile,
// displaced; profile and displacements are fitted together, and a rising
// polynomial is put through the displacements.
//
// # Two kinds of blur
//
// Arm.OpticalX, OpticalY is the blur of the optics. Arm.BlurX, BlurY is the one
// with which package optics comes closest to the frames. K takes the scene as
// constant over pixels. Where it is not (the window's light seen by the
// reference arm is interpolated; a code off the pixel grid is averaged), the
// pixel's box is counted twice, and the model needs a smaller σ. Using the
// optical blur there leaves two to nine times the squared error.
//
// # What stops it
//
// Iterations end when parameters move less than 1e-3 px (blur), 1e-5 px
// (registration), 1e-4 px (displacements), or after a fixed number of rounds.
// All random numbers have fixed seeds: the same series gives the same bundle
// but for its time.
//
// # Cost
//
// Dominated by the coarse search: about a thousand Fourier transforms of
// some 130×130 points, a few seconds of one core. Memory: a few float64
// planes per sensor.
//
// # Series file
//
// Besides the parts named in the design, a series may hold
//
//	[streak] exposure = [1, 2, 4]   # of each flat pair, any unit: linearity error
//	[streak] saturation = 4095      # ADU, where frames do not tell
//	[sweep] still = ["still.tif"]   # the spots with the sweep off: absolute displacement
//	[window] x, y, w, h             # set by hand, on the turned sensor
//	[validity] from, until          # times; without them the bundle is always valid
//
// Parts that may be missing are named in Bundle.Warnings with what follows.
// Dark, coded, open and target frames and two delays must be there.
//
// # References
//
//  1. EMVA Standard 1288, Release 4.0 Linear, European Machine Vision
//     Association 2021.
//  2. G. D. Evangelidis, E. Z. Psarakis, Parametric image alignment using
//     enhanced correlation coefficient maximization, IEEE Trans. Pattern
//     Anal. Mach. Intell. 30 (2008) 1858–1865.
//  3. D. Padfield, Masked object registration in the Fourier domain, IEEE
//     Trans. Image Process. 21 (2012) 2706–2718.
//  4. ISO 12233, Photography — Electronic still picture imaging — Resolution
//     and spatial frequency responses (edge method).
//
// Further sources stand beside the lines that use them.
package calib
