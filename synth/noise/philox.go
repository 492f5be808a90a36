// Package noise makes the noise of magnitude and real images from a counter,
// so that a voxel's noise depends on nothing but its own place, and gives the
// exact moments of what such noise does to a signal.
package noise

import "math"

// Key names a stream of noise: one per seed, scan and slice.
type Key struct {
	Seed  uint64
	Scan  uint32 // number of the scan, with the channel in its upper bits
	Slice uint32
}

// Pair returns two independent standard normal numbers for voxel n.
//
// The 128 random bits come from Philox4x32-10 with the seed as key and
// (voxel, slice, scan) as counter, the normals from the Box-Muller transform.
// Source: Salmon et al., Proc. SC11 (2011), "Parallel random numbers: as easy
// as 1, 2, 3"; Box and Muller, Ann Math Stat 29 (1958) 610.
func (k Key) Pair(n uint64) (x, y float64) {
	r := philox([4]uint32{uint32(n), uint32(n >> 32), k.Slice, k.Scan}, [2]uint32{uint32(k.Seed), uint32(k.Seed >> 32)})
	const to = 1.0 / (1 << 53)
	u := (float64((uint64(r[0])<<32|uint64(r[1]))>>11) + 0.5) * to // never 0
	v := float64((uint64(r[2])<<32|uint64(r[3]))>>11) * to
	radius := math.Sqrt(-2 * math.Log(u))
	sin, cos := math.Sincos(2 * math.Pi * v)
	return radius * cos, radius * sin
}

// philox is the ten-round Philox4x32 bijection.
func philox(c [4]uint32, k [2]uint32) [4]uint32 {
	for range 10 {
		a := uint64(c[0]) * 0xD2511F53
		b := uint64(c[2]) * 0xCD9E8D57
		c = [4]uint32{uint32(b>>32) ^ c[1] ^ k[0], uint32(b), uint32(a>>32) ^ c[3] ^ k[1], uint32(a)}
		k[0] += 0x9E3779B9
		k[1] += 0xBB67AE85
	}
	return c
}
