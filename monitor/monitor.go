// Package monitor holds what is computed: scans, operating points, runs and the
// vocabulary they share with every later stage (quality, phase, choke state,
// the table of quantities).
//
// Everything inside is SI: absolute pressures in Pa, temperatures in K, times as
// int64 nanoseconds UTC. A value that is not available is NaN together with a
// cause; the zero value of a quality, a state or a cause is "missing" or
// "unknown", never a plausible reading.
package monitor
