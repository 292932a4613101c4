// Package measure turns a reconstructed cube and the figures of its fit into
// the numbers a laboratory asks for, and into a verdict on the shot.
//
// # Light curve
//
// With L_k the light of frame k in photoelectrons and d_k its length in ps,
// the light curve is the power
//
//	p_k = L_k / d_k            photoelectrons per ps, at the frame centre t_k   (1)
//
// Peak time and height come from a parabola fitted to the logarithm of the
// samples around the largest one, which is exact for a Gaussian. The full width at half
// maximum is the distance between the two half-height crossings nearest to the
// peak, the rise time that between the 10 % and the 90 % crossing before it;
// crossings are interpolated linearly. For a Gaussian pulse of standard
// deviation σ the width is 2√(2 ln 2)·σ.
//
// # Track and speed
//
// In every frame that carries at least a tenth of the light of the brightest
// one, the centroid is taken over the pixels whose 3×3 mean exceeds a set
// share of the frame's largest 3×3 mean; frames whose patch touches the border
// of the window are left out, because a clipped patch has a displaced centroid.
// The velocity is the slope of a straight line fitted by weighted least squares,
// weights being the light, to the centroids of the frames that carry at least
// half the light of the brightest one (all, where those are fewer than three); its deviation comes from
// the scatter about the line with n−2 degrees of freedom. Where the track bends,
// as at a wall, the line is that of the stretch of consecutive frames that
// carries most light and scatters by no more than half a pixel rms.
//
// # Deviations
//
// Deviations of the light curve and of what is read off it are those of
// counting alone: var L_k = L_k/c̄ with c̄ the mean transmission of the code.
// They leave out what regularisation and calibration add, and their Method
// says so. For a Gaussian pulse of N counted photoelectrons the deviation of
// the mean time is σ/√N and that of the width is width/√(2N) (maximum
// likelihood of a normal sample, e.g. Kendall & Stuart, The Advanced Theory of
// Statistics, vol. 2; from memory).
//
// # Verdict
//
// good: no reason. doubtful: at least one limit is passed. unusable: a limit is
// passed so far that the numbers must not be used. A quick look is judged by its
// light, its saturation and the agreement of the arms alone. Each reason carries the
// value, the limit and the remedy in plain words.
//
// Cost: one pass over the cube, no allocation that grows with it beyond two
// planes. Results are the same on every run.
package measure
