// Package maps is the vocabulary that the other packages share: what the
// tissue is (Grid, Volume, Set, Mixture, Tissue), how a scan was timed
// (Timing, Acquisition) and what comes out of it (Series).
//
// Inside the program times are in seconds, angles in radians, frequencies in
// hertz, field strengths in tesla, lengths in millimetres, and proton density
// is relative to water = 1. World axes are RAS+: x to the patient's right,
// y to anterior, z to superior.
//
// The package knows nothing of physics and nothing of files on disk.
package maps
