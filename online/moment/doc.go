// Package moment keeps the means and co-moments of score vectors in a form that
// can be added to, retracted from, replaced and merged in any order without loss.
//
// A Cell holds the number of units n and sums of shifted products about a fixed
// origin K,
//
//	A_i   = sum (z_i - K_i)
//	B_ij  = sum (z_i - K_i)(z_j - K_j)
//	T_ijk = sum (z_i - K_i)(z_j - K_j)(z_k - K_k)
//
// each as an unevaluated sum of two float64 (about 106 bits). Means and centred
// moments are derived from them on request. Centred updates (Welford 1962) would
// need no such width, but retraction multiplies their rounding error by the ratio
// of what was there to what is left, without bound; plain sums about an origin
// have no such feedback, and 106 bits pay for the cancellation.
//
// Which co-moments a cell keeps is its Shape, shared by all cells of an estimate's
// study and fixed for life. Nothing here allocates after construction, except
// encoding into a buffer that is too small.
package moment
