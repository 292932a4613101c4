// Package solve reconstructs a space-time cube from the two frames of a shot.
//
// # Problem
//
// The cube is a sum of smooth, non-negative blobs, x = B·z with z ≥ 0 and
// B = Bt⊗By⊗Bx, each factor the cubic B-splines [6] on knots Spacing apart:
// the method of sieves [7, 8]. Non-negative blobs of the right size are a
// far stronger statement about a scene than small differences between
// voxels. [Auto] solves
//
//	minimise over z ≥ 0   ½‖E−E(B·z)‖²_w + ½‖R−R(B·z)‖²_w + Λ·v·Σ |(∂x, ∂y, α∂t) z|₂      (3)
//
// and [Solve] the same on voxels, B = 1 and v = 1. x is the cube, T×H×W
// float32, row-major with time slowest, photoelectrons per window pixel and
// frame; z likewise has mt×my×mx coefficients. E and R are the measured
// streak and reference frames in photoelectrons, E(x) and R(x) the model of
// package optics, w the inverse variances, 0 for masked pixels. ∂ are
// differences between neighbours, 0 where they would leave the array
// (Neumann). Λ = Lambda/Sigma, where Sigma is the typical standard deviation
// of a lit pixel: multiplying light and noise by the same factor leaves
// Lambda as it is. v is the number of voxels per coefficient.
//
// An axis of n samples has ⌈(n−1)/h⌉+3 splines, centred on it, so that four
// cover every sample and they add up to 1 up to the ends. An axis of one
// sample has one, the constant.
//
// # Choice of spacing and Lambda
//
// A tenth of the pixels of both arms, at fixed pseudo-random places, is hidden
// and the rest fitted; χ² per hidden pixel says how good the cube is
// (cross-validation [9]). Spacings are walked from the coarsest, 3 frames and
// 4.5 px, to the finest, 1 and 1, with Lambda 0.03 and at most 80
// iterations each. Each starts from the cube of the one before, evaluated at
// the new knots, and from duals of 0: what the frames do not tell stays as
// smooth as it was, which is worth 1 to 5 dB against starting in the dark.
// The walk ends when a step misses 2 % more than the best and the best is under
// 1.2. Then the coarsest
// one is taken that misses by little more than the best: in χ² per pixel, for
// an excess e of the best over 1, by the larger of 0.01 and e·min(max(3e, ½), 1).
// A large excess is the model's own error, which finer splines fit first and
// wrongly; with a streak blur off by half and a ratio off by 5 % at 2000
// photoelectrons that costs 4 dB instead of 18. Beside it the next closer and
// wider spacing in time, and Lambda 0.01 and 0.1, are tried and kept if they
// miss by 0.3 % less. Lambda 0 is not: without any weight the cube goes on
// changing for thousands of iterations, for the worse.
//
// Last, the cube is fitted to all pixels until it converges, twice, with
// variances from the model between. If the finest spacing is chosen and χ²
// per pixel still exceeds 1 + 3·√(2/N), the voxels' own answer is given, with
// Lambda by the discrepancy principle [4], and a note says so. χ² over 1.2 is
// noted.
//
// # Variances
//
// Variances come from the smoothed frame first, then from the model's own
// answer after a rough solve, twice; weights taken from single counts would
// favour pixels that by chance counted few. Light of the scene outside the
// window reaches reference pixels at its edge and is not modelled; those
// pixels get the square of as much as it may be added to their variance.
// Pixels that stand out of their neighbours further than the arm's blur allows
// for any scene (cosmic rays, new hot pixels) are masked first.
//
// # Method
//
// The primal-dual method of Chambolle & Pock [1] with the diagonal
// preconditioning of [2] and over-relaxation [3]. One loop, no inner solver.
// With K the operator of data and differences, y its duals,
//
//	v  = max(0, x − τ·Kᵀy)
//	u  = prox(y + σ·K(2v − x))
//	x += ρ(v − x),  y += ρ(u − y),   ρ = 1.8
//
// The prox of the data is an average, that of total variation a projection on
// balls of radius Λ·v. The data duals are planes, so on voxels only x and the
// three duals of total variation are cubes: 16 bytes per voxel, and little
// else. With splines the cube is never stored. With P_j = By·z_j·Bxᵀ, the
// fine plane of a coarse time j,
//
//	E[m] = B_s( Σ_j Σ_k Bt[k][j]·(C∘P_j)[m−k·n] )
//	Σ_k x = By·(Σ_j (Σ_k Bt[k][j])·z_j)·Bxᵀ
//
// and the adjoint takes C out of the sum over k likewise. B has no negative
// entry and rows that sum to 1, so the steps below need only its transpose of
// the voxels' column sums.
//
// Step sizes: τ_j = γ/Σ_i d_i|K_ij| and σ_i = d_i/(γ Σ_j|K_ij|) with row
// scales d_i = 3·Sigma/√variance for pixels and 1 for differences; without
// them the χ² of dim pixels takes thousands of iterations. γ, the ratio of
// primal to dual sizes, is set from the light of the cube after 30 and 90
// iterations.
//
// Measured against projected gradients with Nesterov's acceleration, restarts
// and a separable majoriser, on splines without total variation: those lower χ²
// about as fast, but their cubes are up to 6 dB behind after 80 iterations.
//
// # Stopping
//
// Every 10 iterations: a solve has converged when Σ|v−x| ≤ Tol·Σv (z for x
// with splines) and neither arm's χ² has changed by more than 10·Tol of itself
// since the last look, twice in a row. Tol is 3e-4 by default. MaxIter without
// that is Status Limit, not an error.
//
// # Cost, concurrency, determinism
//
// An iteration with splines makes some 4 + 4 products per voxel between
// coarse and fine times, 9/ht more between coarse and fine planes (ht the
// spacing in time), and one blur, view and their transposes per arm; memory is
// 24/v bytes per voxel, 4/v more for each spacing tried, and a part of the
// streak plane per group of coarse times. A choice with its last solves is
// about 1000 to 1400 iterations. With the vector loops of package row one core
// takes 1 to 2.5 ns per voxel and iteration with splines and some 3 on voxels
// (see the benchmarks), without them 5 to 11. Work is shared by Workers. A
// solve touches nothing global; a Problem may be solved by several goroutines
// at once. Work is divided in ways that depend on the shape alone, sums run in
// a fixed order, and products are rounded before they are added (no fused
// multiply-add): the result has the same bits for any number of workers and
// either kind of loop. Magnitudes under 1e-18 are set to 0, so no denormal
// numbers arise.
//
// # References
//
//  1. A. Chambolle, T. Pock, A first-order primal-dual algorithm for convex
//     problems with applications to imaging, J. Math. Imaging Vis. 40 (2011)
//     120–145.
//  2. T. Pock, A. Chambolle, Diagonal preconditioning for first order
//     primal-dual algorithms in convex optimization, ICCV 2011, 1762–1769.
//  3. L. Condat, A primal-dual splitting method for convex optimization
//     involving Lipschitzian, proximable and linear composite terms, J. Optim.
//     Theory Appl. 158 (2013) 460–479.
//  4. V. A. Morozov, On the solution of functional equations by the method of
//     regularization, Soviet Math. Dokl. 7 (1966) 414–417 (discrepancy).
//  5. L. I. Rudin, S. Osher, E. Fatemi, Nonlinear total variation based noise
//     removal algorithms, Physica D 60 (1992) 259–268.
//  6. C. de Boor, A Practical Guide to Splines, Springer 1978, chapters IX to
//     XI.
//  7. U. Grenander, Abstract Inference, Wiley 1981 (sieves).
//  8. D. L. Snyder, M. I. Miller, The use of sieves to stabilize images
//     produced with the EM algorithm for emission tomography, IEEE Trans. Nucl.
//     Sci. 32 (1985) 3864–3872.
//  9. M. Stone, Cross-validatory choice and assessment of statistical
//     predictions, J. R. Stat. Soc. B 36 (1974) 111–147.
package solve
