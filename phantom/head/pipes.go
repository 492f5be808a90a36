package head

// Tubes whose place does not depend on the seed; those with a partner on the
// left are given on the right.
var (
	canalPipe       = newPipe(node{vec{0, -26, -46}, 16}, node{vec{0, -34, -66}, 11}, node{vec{0, -40, -125}, 9.5})
	midbrainPipe    = newPipe(node{vec{4, -17, -5}, 9.5}, node{vec{4, -20, -13}, 11})
	medullaPipe     = newPipe(node{vec{0, -22, -36}, 10}, node{vec{0, -30, -58}, 7.5}, node{vec{0, -40, -125}, 5.5})
	aqueductPipe    = newPipe(node{vec{0, -30, -20}, 1.6}, node{vec{0, -20, 0}, 1.4})
	callosumPipe    = newPipe(node{vec{0, 28, 8}, 2.5}, node{vec{0, 39, 15}, 5}, node{vec{0, 34, 25}, 4}, node{vec{0, 18, 32}, 3.2}, node{vec{0, -8, 33.5}, 3}, node{vec{0, -28, 29}, 3.5}, node{vec{0, -38, 21}, 5.2})
	nosePipe        = newPipe(node{vec{0, 93, -20}, 6}, node{vec{0, 104, -50}, 12})
	neckPipe        = newPipe(node{vec{0, -18, -50}, 58}, node{vec{0, -22, -150}, 52})
	jugularPipe     = newPipe(node{vec{30, 4, -50}, 5}, node{vec{36, 6, -125}, 5.5})
	carotidNeckPipe = newPipe(node{vec{24, 14, -60}, 2.6}, node{vec{28, 16, -125}, 3.4})
	masseterPipe    = newPipe(node{vec{60, 36, -46}, 6}, node{vec{55, 26, -84}, 8})
	pterygoidPipe   = newPipe(node{vec{32, 34, -46}, 9}, node{vec{42, 18, -74}, 8})
	templePipe      = newPipe(node{vec{60, 30, -22}, 8}, node{vec{52, 32, -58}, 6})
	petrousPipe     = newPipe(node{vec{18, -2, -32}, 6}, node{vec{58, -22, -34}, 12})
	spinePipe       = newPipe(node{vec{0, -16, -66}, 9}, node{vec{0, -22, -130}, 11})
	archPipe        = newPipe(node{vec{0, -52, -70}, 5}, node{vec{0, -58, -130}, 5})
	jawPipe         = newPipe(node{vec{49, 14, -50}, 5}, node{vec{46, 30, -84}, 6}, node{vec{22, 78, -98}, 6.5}, node{vec{0, 86, -98}, 7})
	teethPipe       = newPipe(node{vec{24, 56, -70}, 5}, node{vec{19, 76, -72}, 5.5}, node{vec{0, 84, -73}, 5.5})
	cheekbonePipe   = newPipe(node{vec{44, 70, -40}, 6}, node{vec{62, 44, -38}, 4}, node{vec{68, 8, -34}, 4})
	turbinateLow    = newPipe(node{vec{7, 44, -50}, 3.4}, node{vec{7.5, 74, -50}, 3.4})
	turbinateMid    = newPipe(node{vec{6.5, 46, -40}, 2.4}, node{vec{6.5, 70, -40}, 2.4})
	throatPipe      = newPipe(node{vec{0, 28, -46}, 8}, node{vec{0, 20, -70}, 6}, node{vec{0, 16, -130}, 7.5})
	earPipe         = newPipe(node{vec{84, -12, -30}, 3}, node{vec{62, -10, -31}, 2.6})
	caudatePipe     = newPipe(node{vec{13, 24, 9}, 6}, node{vec{15, 12, 17}, 5}, node{vec{18, -8, 24}, 3.2}, node{vec{24, -26, 21}, 2})
	hippocampusPipe = newPipe(node{vec{25, -4, -18}, 5}, node{vec{27, -22, -10}, 4.2}, node{vec{24, -32, -2}, 3})
	peduncle        = newPipe(node{vec{9, -20, -27}, 7}, node{vec{20, -44, -32}, 7}) // from the pons to the cerebellum
	opticNervePipe  = newPipe(node{vec{4, 14, -10}, 2.2}, node{vec{10, 26, -14}, 2}, node{vec{32, 58, -20}, 2.2})
	orbitPipe       = newPipe(node{vec{11, 28, -15}, 4}, node{vec{31, 70, -21}, 18})
	sigmoidPipe     = newPipe(node{vec{50, -44, -25}, 3.4}, node{vec{46, -34, -40}, 3.4}, node{vec{34, -18, -50}, 3.6})
	substantiaPipe  = newPipe(node{vec{3.5, -9.5, -8.5}, 1.5}, node{vec{8, -13, -8}, 1.9}, node{vec{11, -18, -7}, 1.4})
	basilarPipe     = newPipe(node{vec{0, -2.2, -16}, 1.8}, node{vec{0, -3, -36}, 1.9})
	anteriorPipe    = newPipe(node{vec{11, 12, -12}, 1.6}, node{vec{2.6, 17, -9}, 1.3}, node{vec{2.4, 34, 0}, 1.2}, node{vec{2.4, 46, 14}, 1.1}, node{vec{2.4, 38, 31}, 1})
	carotidPipe     = newPipe(node{vec{12, 20, -28}, 2.5}, node{vec{11, 12, -12}, 2.3}, node{vec{22, 8, -9}, 1.6}, node{vec{38, 4, -6}, 1.3})

	eyeMuscles = []*pipe{eyeMuscle(43, -20), eyeMuscle(21, -20), eyeMuscle(32, -9.5), eyeMuscle(32, -30.5)}
)

// eyeMuscle runs from the tip of the orbit to the side of the eye.
func eyeMuscle(x, z float64) *pipe {
	return newPipe(node{vec{10, 26, -14}, 1.5}, node{vec{x, 62, z}, 2.4})
}
