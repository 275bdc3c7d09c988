// Package others judges detection on loops that share no model with package quality:
// other processes, controllers, frictions, loads, tunings and ways of logging, drawn
// from wide ranges. What is found is scored by the same rules (quality.Judge).
//
// PV, SP and OP are in percent of their range, times in seconds from the start,
// gains in %/%. Every case is a pure function of (seed, family, index).
//
// A loop counts as healthy only if its linear models at all operating points it sees
// have a gain margin of 1.8 or more and a peak sensitivity of 2.2 or less, Ti/(Kc K)
// is at most 2.5 times lag and dead time, and the simulated loop without noise comes
// to rest after a load step either way, within ten times lag and dead time. It counts
// as sluggish only if Ti/(Kc K) is more than 4 times lag and dead time and recovery
// takes more than 12; what lies between is not drawn. A fault is subtle, and its miss
// not counted, if the error grew less than 1.5 times.
//
// References: Ziegler and Nichols 1942 (Trans. ASME 64, 759); Cohen and Coon 1953
// (Trans. ASME 75, 827); Dahlin 1968 for lambda tuning; Rivera, Morari and Skogestad
// 1986 (IEC Proc. Des. Dev. 25, 252) for IMC; Tyreus and Luyben 1992 (IECR 31, 2625);
// Smith 1972 for the two-point fit; McAvoy, Hsu and Lowenthal 1972 (IEC Proc. Des.
// Dev. 11, 68) for pH by charge balance; Stenman, Gustafsson and Forsman 2003 (Int. J.
// Adapt. Control 17, 135), Choudhury, Thornhill and Shah 2005 (Control Eng. Practice
// 13, 641) and He, Wang, Pottmann and Qin 2007 (IECR 46, 4549) for friction.
package others
