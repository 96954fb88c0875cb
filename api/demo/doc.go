// Package demo invents a laboratory whose truth is known.
//
// Everything in it is made up: the island of Ostervane, its people, clients,
// instruments, working standards and numbers. Only the international reference
// materials are real, with the published values that every registry is seeded
// with; what they "really" are here is drawn about those values with their
// published uncertainties, so that the whole chain can be held against a truth.
//
// [Build] writes through the operations of package registry alone, from files
// that are written as instruments would export them and read back as a
// laboratory would import them: methods, working standards whose values are
// assigned from sessions against international materials, routine sessions with
// drift, an effect of peak size, carry-over, a bottle gone bad, a bad nitrogen
// peak and a leak, calibrations approved by a second person, final values, and
// one report for each of two clients. [Volume] makes as much routine work as a
// benchmark asks for.
//
// # Same seed, same bytes
//
// Time is a [Clock] that moves only when told, codes and secrets come from a
// seeded reader, so two laboratories of one seed have equal ledgers to the last
// byte. That makes every secret of such a registry known to all: Build revokes
// the token that it was given. Whoever serves the registry afterwards opens it
// with the real clock and real randomness and issues a token of its own.
//
// # Safety
//
// The numbers are invented, the hazards of real work are not: analysers burn or
// crack samples at 1000 to 1450 °C and are fed with compressed gases, hydrogen
// among them. Nothing here is an instruction; the safety data sheet, local rules
// and trained staff decide.
package demo
