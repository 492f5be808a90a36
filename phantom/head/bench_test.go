package head

import (
	"testing"

	"voxelproof/phantom"
)

func BenchmarkBuild(b *testing.B) {
	table, err := phantom.Load()
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if _, err := Build(b.Context(), Spec{Voxel: [3]float64{2, 2, 2}}, table, nil); err != nil {
			b.Fatal(err)
		}
	}
}
