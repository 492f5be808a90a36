// Package acquire makes the pictures a scanner would make of an object: with
// the prescribed geometry, the resolution that k-space and the echo train
// leave, water-fat shift, partial volume, wrap and noise. Package render is the
// other level: one pixel per voxel of the maps.
//
// The k-space of every tissue at one geometry does not depend on the timing of
// a scan. An Object keeps it, so that another TR, TE or TI costs a weighted sum
// and one small inverse transform per slice.
//
// Frequency grows along the readout axis of the picture (to the right, or
// down); a reversed readout turns that round. Time along the readout and along
// the lines of an EPI train runs with k.
package acquire
