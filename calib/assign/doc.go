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
// where τ̂² is 0 (there P is taken at the negative root that was cut off, so
// that nothing jumps). [Analyse] does this; [Combine] is the case τ² = 0;
// [FinalValue] adds the rules of agreement of a sample's sessions;
// [EstimateBetween] is τ² alone, for values that share nothing.
//
// # Coverage
//
// How often U at p = 0.95 holds the truth, in % of 10,000 simulated campaigns a
// cell; a session's own u is about 0.045 ‰, known from 8 degrees of freedom. U
// is the recommended estimator (Paule–Mandel, private weights); beside it the
// naive ways that it replaces: no component between sessions (the weighted mean
// whose u follows from the sessions' own), k = 1.96 for every number of
// sessions, and anchors averaged as if each session had its own.
//
//	                        anchors shared, u = 0.03 ‰      nothing shared
//	 m     τ (‰)        U   no τ²  k 1.96  averaged      U   no τ²  k 1.96
//	 3     0          97.1   92.4    94.6      94.2    97.9   90.6    93.2
//	       0.02       96.6   90.6    93.8      93.9    97.3   87.6    91.8
//	       0.045      95.4   84.0    91.3      92.6    95.8   77.3    87.5
//	       0.06       94.5   78.1    89.4      92.2    95.3   70.2    85.6
//	       0.15       93.1   47.5    83.6      91.7    95.4   38.2    80.9
//	 4     0          96.5   92.5    94.9      91.7    97.7   89.7    93.3
//	       0.06       94.6   78.9    91.5      91.2    96.1   67.9    87.7
//	       0.15       94.2   49.4    87.7      92.6    95.6   37.3    85.9
//	 5     0          95.9   92.5    94.7      89.0    97.3   88.7    92.9
//	       0.06       94.5   79.0    91.9      89.8    96.2   66.7    88.5
//	       0.15       94.1   50.3    89.3      92.5    95.1   35.9    87.7
//	 6     0          95.6   93.1    94.9      86.7    97.2   88.8    93.1
//	       0.06       94.8   81.3    92.9      88.7    95.6   65.4    89.4
//	       0.15       94.4   52.7    90.9      92.5    94.9   35.1    89.0
//	 8     0          94.9   92.8    94.4      81.3    96.4   87.7    92.7
//	       0.06       94.5   82.1    93.3      86.4    94.7   63.7    89.9
//	       0.15       94.7   54.7    91.8      92.2    94.9   34.2    90.6
//	12     0          94.7   92.8    94.5      74.4    95.2   86.3    92.1
//	       0.06       94.2   84.5    93.6      83.3    94.6   63.0    91.8
//	       0.15       94.7   59.7    93.3      91.8    95.1   33.1    92.5
//
// Every cell (five τ): go test -run '^$' -bench Coverage -benchtime 10000x ./calib/assign
//
// From five sessions on, sharing anchors, U holds 94 to 96 %. What it misses:
// three and four sessions, and up to eight that share nothing, are covered in
// up to 98 % where there is no effect between them, and three sessions that
// differ by three times their own u in 93 %. Both come from the same place. For
// equal sessions the scatter s² and the mean are independent, and s² is
// complete: the only U made of s² that holds 95 % for every τ is Student's t
// times s/√m, which falls below what the readings themselves can say whenever
// sessions agree by chance. u keeps the sessions' own part instead and is then
// too large. A plan that names the method's long-term component, or five
// sessions, avoids it.
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
