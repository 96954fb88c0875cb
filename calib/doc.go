// Package calib puts raw deltas on a scale: one line through anchors of
// assigned value, with the terms an instrument needs, fitted in one
// adjustment, and every sample's value with the uncertainty that follows.
//
// # Notation and units
//
// Every delta is in per mil (δ × 1000) as a float64; every standard
// uncertainty u is k = 1 in the same unit; times are hours from the first
// reading of the session; sizes are in whatever unit the method uses. A nil
// pointer is "not known", a zero uncertainty "exact". NaN and infinities are
// refused. What cannot be computed is nil, never zero.
//
//	r_i      raw delta of reading i against the working gas
//	τ        a material's delta on the scale, y its assigned value
//	t_i, s_i time and size of a reading, t_ref and s_ref their means over fitted readings
//	θ        the parameters: intercept, slope, drift, size, memory, monitors' levels
//
// # The model
//
// (1 + δ_true) = (1 + δ_raw)(1 + δ_gas) is exactly affine in δ, so delta space
// and ratio space agree. With memory μ,
//
//	r_i = (1 − μ)·[α + β·τ_m(i) + Σ_j γ_j g_j(t_i) + Σ_j κ_j h_j(s_i)] + μ·r_{i−1} + ε_i
//	y   = τ + e,   Cov(e) = V_y,   Cov(ε) = V_r
//
// estimated by minimising (r − f)ᵀV_r⁻¹(r − f) + (τ − y)ᵀV_y⁻¹(τ − y). Package
// adjust does that with the latent values eliminated exactly; V_y may be zero,
// singular or full. Straight lines by ordinary and weighted least squares, the
// line of York, the weighted, generalised-distance and full-covariance lines
// of ISO/TS 28037 and the exact line through two anchors are special cases
// and agree identically.
//
// Anchors pin the line. Monitors have free levels and inform drift, size and
// memory only. Controls and samples never enter. Terms must be estimable with
// every level free, from differences within materials; what only assigned
// values would identify is refused. The terms are described with [Drift],
// [Size] and [Memory]; with size blank, the blank itself is in
// [Result.Blank].
//
// # Weights
//
// Declared uncertainties are taken as known, or with degrees of freedom.
// Estimated ones scale with variances φ that are found by restricted maximum
// likelihood with V_y held as declared (weights equal and size), or with every
// level free (replicate); several readings of one preparation add a variance
// of their own. The covariance of the parameters is never multiplied by
// χ²/ν: that would stretch the anchors' uncertainties too.
//
// # Uncertainty
//
// The covariance of the parameters is the sum of its sources,
//
//	Cov θ = K V_r Kᵀ + (∂θ/∂y) V_y (∂θ/∂y)ᵀ,   K = C XᵀΣ⁻¹,   ∂θ/∂y = −K S G
//
// with X at the adjusted values: the Gauss–Newton convention of ISO/TS
// 28037:2010 and York et al. 2004. Two other conventions exist and differ
// where chi-square is not zero. [Result.Number] gives a result with all its
// sources, by identities that outlive the calculation; correlations between
// results are what sources they share. For predicting how the estimate moves
// when an assigned value does, [Result.AnchorDerivatives] is the exact
// derivative at fixed variances, which is not ∂θ/∂y where there are residuals.
//
// # Flags
//
// A flag travels with the result and with everything made of it: a code that
// stays, how bad it is, the readings or the subject, one sentence and what to do.
// It never changes a number. Limits are the method's, by [Policy]; where the
// method is silent, the figure below is used.
//
//	code                          severity  raised when
//	single_anchor                 serious   the scale rests on one anchor
//	two_anchors                   note      two anchors: nothing shows that one is off
//	few_anchors                   warning   fewer than MinimumAnchors
//	anchors_close                 warning   anchors span less than AdvisedSpan (below MinimumSpan: refused)
//	anchor_is_control             warning   one material is anchor and control of one quantity
//	anchor_disagrees              serious   a whole anchor is off: left-out |z| > LeftOutLimit (3); says so
//	                                        when both members of a pair are, and when nothing tells which
//	reading_disagrees             warning   studentised (known u: standardised) residual > StudentizedLimit (3)
//	chi_square                    warning   p of chi-square < TestLevel (0.05)
//	lack_of_fit                   warning   p of the F test against free levels < TestLevel
//	few_degrees_of_freedom        warning   an estimated variance has fewer than 4
//	weak_slope                    serious   (t·u(β)/β)² > 0.05 (above 1: refused)
//	slope_drift                   warning   drift × τ: the slope changed with time, p < 0.01
//	term_missing                  note      the readings ask for drift, size or memory, p < 0.01
//	no_predecessor                note      memory, and nothing is known of what came before
//	unbracketed                   warning   before the first or after the last anchor or monitor
//	size_range                    note      a peak outside the fitted sizes; warning with a size term
//	extrapolation                 warning   beyond the anchors' span; note within U of it
//	replicate_scatter             warning   a subject's readings scatter more than the fit, p < 0.01
//	preparation_variance_unknown  warning   only samples have several readings of one preparation
//
// The registry adds what only it can know: values (provisional_value,
// expired_value, value_changed_in_session, circular_assignment,
// definitions_differ), controls (control_without_value, control_deviates,
// control_outside_limit), the line and its scatter against the method's limits
// and the instrument's own history (slope_outside_limits,
// repeatability_outside_limit, slope_off_history, intercept_off_history,
// drift_off_history), bottles and portions (opened_too_often, open_too_long,
// unit_in_doubt, unit_overdrawn, storage_excursion, portion_too_small,
// overlap_waived), identical treatment (matrix_mismatch, group_without_anchor),
// what was done before the fit (h3_stale, h3_changed, h3_step, h3_not_straight,
// h3_determined_later, h3_outside_range, h3_not_propagated,
// nothing_left_of_run, peaks_not_resolved), and, of a file before any fit, how
// it was seated (quantity_missing, too_few_anchors, no_control,
// sample_after_last_standard, overlapping_session).
//
// # Numbers
//
// The bits of values, uncertainties and covariances are equal on every
// architecture and do not depend on the order of readings or anchors:
// readings are sorted by (time, number, material, raw) before any sum, no
// product is fused into a sum, and the fit has its own small linear algebra
// and logarithm. Coverage factors and p-values come from gonum's
// distributions. [EngineNumber] names the algorithm; older ones stay callable.
//
// # Sources
//
//   - ISO/TS 28037:2010, Determination and use of straight-line calibration functions
//   - York, Evensen, López Martínez, De Basabe Delgado 2004, Unified equations for
//     the slope, intercept, and standard errors of the best straight line, doi:10.1119/1.1632486
//   - JCGM 100:2008 (GUM), 101:2008 (Monte Carlo), 102:2011 (several outputs)
//   - Patterson, Thompson 1971, Recovery of inter-block information when block
//     sizes are unequal (restricted maximum likelihood), doi:10.1093/biomet/58.3.545
//   - Cook 1977, Detection of influential observation in linear regression, doi:10.1080/00401706.1977.10489493
//   - Hurvich, Tsai 1989, Regression and time series model selection in small
//     samples, doi:10.1093/biomet/76.2.297
package calib
