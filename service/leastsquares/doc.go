// Package leastsquares minimises sums of squares of smooth functions of a few parameters. It knows nothing of what it fits.
//
// The problem. Given n residuals r_i(x) of p parameters x, find x with the least
//
//	S(x) = sum_i r_i(x)²        or, with Huber weights,        S(x) = sum_s ρ(|r_s|)
//
// where a sample s is one real residual, or the pair of residuals 2s and 2s+1 that are the real and imaginary part of one
// complex sample. A caller implements Model; a Workspace holds all buffers, is sized on first use, grows when a larger problem
// comes and allocates nothing otherwise, so that one workspace can serve a stream of fits. A workspace serves one goroutine at a time.
//
// The method is Levenberg-Marquardt in the trust-region form of Moré: at each point the Jacobian J is reduced to a p by p
// triangle, and everything after that (the undamped step, the damping that keeps a step inside the trusted radius, the stopping
// test, the covariance) works on the triangle alone. Two ways lead to the triangle. The usual one gathers JᵀJ and Jᵀr in one pass
// and takes the Cholesky factor after scaling JᵀJ to a unit diagonal; it costs n p²/2 multiplications. Squaring J also squares its
// condition, so when a pivot says that digits are being lost, the Jacobian itself is reduced by Householder reflections with
// column exchange, which costs several times more and keeps them.
//
// Stopping. A fit is finished when no linear combination of the parameters would move by more than Options.Tolerance of its own
// standard deviation. That length is free here: it is |Qᵀr|/s, with Q an orthonormal basis of the columns of J and s the residual
// standard deviation, and it does not depend on how the parameters are scaled. The sum of squares is never used for it: near the
// solution it is flat to more digits than a float64 has. A step shorter than the rounding of the parameters also ends a fit.
//
// A fit that does not converge is no error: Result.Status says so, and what was reached is returned.
//
// Sources: J. J. Moré, The Levenberg-Marquardt algorithm: implementation and theory, in Numerical Analysis, Lecture Notes in
// Mathematics 630 (1978) 105-116; D. M. Bates and D. G. Watts, A relative offset orthogonality convergence criterion for
// nonlinear least squares, Technometrics 23 (1981) 179-183; P. Businger and G. H. Golub, Linear least squares solutions by
// Householder transformations, Numerische Mathematik 7 (1965) 269-276; P. J. Huber, Robust Statistics (1981), chapter 7.
package leastsquares
