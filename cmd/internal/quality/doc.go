// Package quality scores detection against loops whose truth is known: simulated
// loops drawn from wide ranges (faults of every kind, and healthy loops that look
// odd) and recorded runs. It judges package detect by its public interface only
// and shares no model with the rest of the program.
//
// Inside the simulation PV, SP and OP are in percent of their range, times in
// seconds from the start of the scenario; gains are in %/% and reset times in
// seconds of the ideal form OP = Kc*(e + (1/Ti)*Int e + Td*de/dt). Every scenario
// is a pure function of (seed, family, index), whatever the number of cores.
//
// References: Skogestad 2003 (J. Process Control 13, 291) for the half rule and
// SIMC tuning; Åström and Hägglund 2004 (J. Process Control 14, 635) for AMIGO
// tuning; He, Wang, Pottmann and Qin 2007 (IECR 46, 4549) for the two-parameter
// model of a sticking valve; Karnopp 1985 (J. Dyn. Sys. Meas. Control 107, 100)
// for the idea of its alternative.
package quality
