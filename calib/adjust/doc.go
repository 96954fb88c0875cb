// Package adjust fits a model to readings whose explanatory values are
// themselves uncertain: generalised least squares with latent values.
//
// # The problem
//
// Row i observes r_i = F_i(θ, τ) + ε_i, where θ are the parameters and τ the
// latent values of the anchors; the assigned values are y = τ + e. With
// Cov(ε) = V_r, Cov(e) = V_y and Cov(ε, e) = V_ry, [Solve] minimises
//
//	χ² = (r − F)ᵀ V_r⁻¹ (r − F) + (τ − y)ᵀ V_y⁻¹ (τ − y)
//
// (written here for V_ry = 0). The latent values are eliminated exactly, so
// that neither V_r⁻¹ nor V_y⁻¹ is ever formed and both may be zero, singular
// or full as long as Σ is not singular. With S the slopes ∂F/∂τ of the rows and
// G the incidence of rows to anchors,
//
//	e = r − F(θ, y)
//	Σ = V_r + S G V_y Gᵀ S − S G V_yr − V_ry Gᵀ S
//	τ̂ = y + (V_y Gᵀ S − V_yr) Σ⁻¹ e,   X = ∂F/∂θ at τ̂
//	θ ← θ + C Xᵀ Σ⁻¹ e,  C = (Xᵀ Σ⁻¹ X)⁻¹,  χ² = eᵀ Σ⁻¹ e
//	K = ∂θ/∂r = C Xᵀ Σ⁻¹,  ∂θ/∂y = −K S G
//
// which is Gauss–Newton, the convention of ISO/TS 28037:2010 and of York et
// al. 2004 (doi:10.1119/1.1632486) for the covariance of the parameters.
//
// # Numbers
//
// Σ is whitened by Cholesky, X by columns of unit length, the least-squares
// step is a Householder QR; normal equations are never formed. Every product
// is rounded before it is added, by the explicit conversion float64(x*y)+z, so
// that no compiler fuses the two and all architectures give the same bits.
// Only math.Sqrt, which is exact everywhere, is taken from the mathematical
// library.
package adjust
