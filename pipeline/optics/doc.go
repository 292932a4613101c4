// Package optics is the station's forward model and its adjoint: what a
// space-time cube makes the streak camera and the reference camera count.
//
// # Model
//
// For a scene x[k][y][i] of T frames, H rows and W columns (row-major, time
// slowest; photoelectrons per window pixel and frame, code open, streak arm)
//
//	E[m][i] = B_s( Σ_k C[m−k·n][i] · x[k][m−k·n][i] )       (1)
//	R[v][u] = a · B_r( V( Σ_k x[k] ) )                      (2)
//
// C is the code (H×W, 0 to 1), n the Step (sweep pixels per frame), a the
// throughput Ratio (reference photoelectrons per streak photoelectron). E
// lies on a padded plane of H+(T−1)·n+2·pad rows and W+2·pad columns, so that
// light which the blur carries out of the window is still counted; light that
// leaves the padded plane is lost. R lies on the reference sensor's own
// pixels, on the rectangle of the View. The measured reference frame is
// therefore never resampled and its noise stays uncorrelated.
//
// # Blur
//
// B_s and B_r are separable convolutions with zeros outside the plane. The
// scene is constant over a window pixel and the camera integrates over a
// pixel, so a Gaussian point spread g_σ becomes the sampled kernel
//
//	K[j] = (tri ∗ g_σ)(j),   tri = box ∗ box                (3)
//
// and along the sweep, where the image also moves by n pixels while a frame
// lasts,
//
//	K[j] = (box_n ∗ tri ∗ g_σ)(j − shift).                  (4)
//
// Both have closed forms in the normal distribution function: second and
// third differences of its repeated integrals. σ = 0 gives the identity for
// (3) and [1/8, 3/4, 1/8] for (4) with n = 1. Kernels are cut where the mass
// left over on a side falls under 1e-4 and then normalised to sum 1.
//
// # View
//
// V brings a window plane to the reference sensor. For a sensor pixel (u, v)
// the inverse homography gives the window position p and the Jacobian J, the
// number of window pixels the sensor pixel covers:
//
//	V(f)(u, v) = J · ⟨f at p⟩                               (5)
//
// which keeps flux. ⟨f at p⟩ is the six-point cubic convolution of Keys
// [1, eq. 19 ff.], exact for cubics; at half a pixel and a quarter of the
// sampling frequency it keeps 95 % of the contrast, the four-point kernel
// 88 %. f is 0 outside the window. A sensor pixel that is r > 1 window pixels
// long is averaged over sub-positions spread over √(r²−1) window pixels,
// which together with the window pixel's own box has the variance of the
// sensor pixel's box; a smaller one (r < 1) is only interpolated.
//
// # Coarse grids
//
// [Geometry.Coarse] and [Bin] state the same model on pixels and frames n
// times larger: see there for what is approximate.
//
// # Cost, concurrency
//
// Forward and Adjoint cost O(T·H·W) plus blurs of O(plane · kernel length)
// and 36 multiplications per reference pixel. A Model is immutable after
// NewModel and may be shared. All sums run in a fixed order, and products are
// rounded before they are added (no fused multiply-add), so results have the
// same bits on every machine.
//
// # References
//
//  1. R. Keys, Cubic convolution interpolation for digital image processing,
//     IEEE Trans. ASSP 29 (1981) 1153–1160.
//  2. R. Hartley, A. Zisserman, Multiple View Geometry in Computer Vision,
//     2nd ed., Cambridge 2004, sect. 2.3 (homographies).
package optics
