// Package montecarlo propagates distributions through a chain of fits (JCGM
// 101:2008), to see whether the first-order uncertainties of the chain hold.
//
// A [Chain] is built from uncertain numbers (values from outside), fits that
// take them as anchors, and weighted means that make one generation's results
// the next one's assigned values. In each trial every source is drawn once,
// from its stated distribution, and used wherever it occurs, and every fit of
// every generation is solved again. Data are moved about the adjusted values,
// where each fit returns its own estimate: about the observed ones the trials
// would answer another covariance convention and blame it on nonlinearity.
// Weights and estimated variances stay as stored; the noise of a group with ν
// degrees of freedom is σ̂·√(ν/χ²_ν)·normal with one χ² in each trial.
//
// Trials run in blocks until mean, u and both end points have settled to a
// fifth of the numerical tolerance δ (JCGM 101, 7.9); then y ± U is compared
// with the probabilistically symmetric interval, each end point within δ
// (clause 8). End points are compared and not u, which for a t-distributed
// source is larger by √(ν/(ν−2)), and undefined for ν ≤ 2.
//
// Random numbers come from one counter-based stream for each seed and block,
// and blocks are merged in their order, so that the answer depends on the
// seed alone and not on the number of processors.
package montecarlo
