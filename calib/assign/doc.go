// Package assign makes one value out of several sessions: the final value of a
// sample, or the assigned value of a working standard with its homogeneity and
// stability, and the plan of such a campaign.
//
// All values are deltas in ‰, u is a standard uncertainty (k = 1) in ‰. Every
// result is an uncertain number, so what sessions share (anchor values,
// constants, corrections) is known by the identity of its sources.
//
// # Combining
//
// The results x of m sessions have the covariance V = V_private + V_common:
// private sources occur in one session only, common ones in several. With τ²
// the variance between sessions,
//
//	Ω = V + τ²I,   P = Ω⁻¹ − Ω⁻¹11ᵀΩ⁻¹/(1ᵀΩ⁻¹1)
//	Q = xᵀP(0)x on m − 1,   I² = max(0, 1 − (m − 1)/Q)
//	value = wᵀx,   w ∝ 1/(private variance + τ²),   u² = wᵀΩw
//
// The common part does not average away: u never falls below it. Weights of the
// full covariance are an option, refused where one is negative. τ² is estimated
// by Paule and Mandel, DerSimonian and Laird, or restricted likelihood
// ([Estimator]), all three for a full covariance; the plan fixes one before the
// data and all are shown. Each session's effect is a source of its own,
// campaign:<assignment>/<session>, in a group with Var(τ̂²) = 2/tr(PP), also
// where τ̂² is 0. [Analyse] does this; [Combine] is the case τ² = 0;
// [FinalValue] adds the rules of agreement of a sample's sessions;
// [EstimateBetween] is τ² alone, for values that share nothing.
//
// How well U covers, from 10,000 simulated campaigns (coverage_test.go): 94 to
// 96 % for eight sessions whose anchors count for something, with or without an
// effect between sessions, and for four with one. Three sessions without an
// effect are covered in nearly every case: U is then too large, since Student's
// t of two degrees of freedom multiplies an u that the scatter can only
// enlarge. Leaving τ² out covers 82 % when τ is a little above the session's own
// u and 55 % at three times that; averaging anchors as if they were independent
// covers about 82 %.
//
// # Studies of the lot
//
// [AnalyseHomogeneity] and [AnalyseStability] follow ISO 33405:2024 (formerly
// ISO Guide 35:2017); [Decide] assembles u² = u_char² + u_bb² + u_lts² and keeps
// the three apart inside. [AnalyseStep] sets the campaign against a predecessor.
//
// # Opinions
//
// [Grubbs], [Cochran], [Dixon], [Huber], [QHampel], [AlgorithmS] and
// [AnalysePrecision] advise. Nothing here leaves out a result because of its value.
//
// # Plans
//
// [Evaluate] gives the u to be expected of a plan by formula, [Options] what
// each change of it buys, [Simulate] runs it many times through the whole chain.
//
// # Numbers
//
// Members are sorted by session and units by code before any sum, so that no
// bit depends on the order of the input. Products are rounded before they are
// added. Probabilities and quantiles come from a library and hold to about ten
// digits. Nothing is written to the arguments; there is no clock, no global
// state, and random numbers come from the caller.
//
// # Sources
//
// DerSimonian and Laird 1986, doi:10.1016/0197-2456(86)90046-2. Paule and Mandel
// 1982, doi:10.6028/jres.087.022. Viechtbauer 2005, doi:10.3102/10769986030003261
// (REML), 2007, doi:10.1002/sim.2514 (interval of τ), and 2010,
// doi:10.18637/jss.v036.i03 (metafor, the check beside ours). Higgins and
// Thompson 2002, doi:10.1002/sim.1186. Hartung and Knapp 2001,
// doi:10.1002/sim.791. ISO 33405:2024, ISO 13528:2022, ISO 5725-2:1994, JCGM
// 100:2008. Analytical Methods Committee 1989, doi:10.1039/an9891401693. The
// identifiers of 2005, 2007, Higgins and Thompson, Hartung and Knapp, and the
// Analytical Methods Committee are from memory, as are those of Grubbs, Cochran,
// Dixon and Rorabacher beside their tests.
package assign
