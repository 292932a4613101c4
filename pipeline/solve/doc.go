// Package solve reconstructs a space-time cube from the two frames of a shot.
//
// # Problem
//
//	minimise over x ≥ 0   ½‖E−E(x)‖²_w + ½‖R−R(x)‖²_w + Λ·Σ |(∂x, ∂y, α∂t) x|₂      (3)
//
// x is the cube, T×H×W float32, row-major with time slowest, photoelectrons
// per window pixel and frame. E and R are the measured streak and reference
// frames in photoelectrons, E(x) and R(x) the model of package optics, w the
// inverse variances, 0 for masked pixels. ∂ are forward differences, 0 where
// they would leave the cube (Neumann). Λ = Lambda/Sigma, where Sigma is the
// typical standard deviation of a lit pixel: multiplying light and noise by
// the same factor leaves Lambda as it is. Measured on moving, decaying and
// expanding scenes at 20, 200 and 2000 photoelectrons per voxel, 0.4 is within
// 0.4 dB of the best Lambda everywhere.
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
// balls of radius Λ. The data duals are planes, so only x and the three duals
// of total variation are cubes: 16 bytes per voxel, and little else.
//
// Step sizes: τ_j = γ/Σ_i d_i|K_ij| and σ_i = d_i/(γ Σ_j|K_ij|) with row
// scales d_i = 3·Sigma/√variance for pixels and 1 for differences; without
// them the χ² of dim pixels takes thousands of iterations. γ, the ratio of
// primal to dual sizes, is set from the light of the cube after 30 and 90
// iterations.
//
// # Stopping
//
// Every 10 iterations: the solve has converged when Σ|v−x| ≤ Tol·Σv and
// neither arm's χ² has changed by more than 10·Tol of itself since the last
// look, twice in a row. At the default Tol of 3e-4 cubes of sparse scenes
// lie within 0.1 dB of their limit, of scenes that fill the window within
// 0.5 dB, after 150 to 400 iterations. MaxIter without
// that is Status Limit, not an error.
//
// # Variances and Lambda
//
// See [Auto].
//
// # Cost, concurrency, determinism
//
// Some 11 ns per voxel and iteration on one core, shared by Workers. A solve
// touches nothing global; a Problem may be solved by several goroutines at
// once. Rows are worked in bands whose height depends on the shape alone, sums
// over bands run in their order, and products are rounded before they are
// added (no fused multiply-add): the result has the same bits for any number of
// workers. Magnitudes under 1e-18 are set
// to 0, so no denormal numbers arise.
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
package solve
