// Package uncertain is the uncertain number: a value with its first-order
// decomposition into independent sources whose identities outlive the
// calculation.
//
//	u²(y) = Σ_s c_s² u_s²,   cov(y1, y2) = Σ_s c1_s c2_s u1_s u2_s,   c_s = ∂y/∂x_s
//
// (JCGM 100:2008, 5.1 and 5.2; JCGM 102:2011 for several outputs). Two numbers
// are correlated exactly through the sources they share, so that differences
// cancel what is common without anyone having to remember that it is.
//
// The same source may have another standard uncertainty in another number: two
// fits of one session estimate the readings' variance anew. The covariance
// then takes the product of the two.
//
// # Degrees of freedom
//
// A source belongs to a group: the variance estimates φ it is scaled by. A
// group holds φ̂ and Cov(φ̂). The effective degrees of freedom run over groups,
// never over components (Welch–Satterthwaite, JCGM 100 G.4, for dependent
// components):
//
//	ν_eff = 2u⁴ / Σ_g d_gᵀ Cov(φ̂_g) d_g,   d_g = ∂u²(y)/∂φ_g
//
// With one φ in each group, Cov = 2φ̂²/ν, this is the usual u⁴/Σ(u_g⁴/ν_g). A
// source without a group has a known variance.
package uncertain
