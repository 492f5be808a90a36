package head

// tissue is an index into the list of tissue names.
type tissue uint8

const (
	skin tissue = iota
	fat
	muscle
	bone
	marrow
	mucosa
	dura
	csf
	cortex
	whiteMatter
	caudate
	putamen
	pallidum
	thalamus
	brainStem
	redNucleus
	substantiaNigra
	dentate
	vitreous
	lens
	venousBlood
	arterialBlood
	plaque
	enhancingPlaque
	infarctWhite
	infarctGrey
	massRim
	massCore
	necrosis
	oedema
	lacune
	microBleed
	meningioma
	numTissues
)

// names of the tissues in the tissue table.
var names = [numTissues]string{
	"skin", "fat", "muscle", "cortical bone", "marrow", "mucosa", "dura", "CSF", "cortex", "white matter",
	"caudate", "putamen", "pallidum", "thalamus", "brain stem", "red nucleus", "substantia nigra", "dentate nucleus", "vitreous humour", "lens",
	"venous blood", "arterial blood", "plaque", "enhancing plaque", "acute infarct, day 1", "acute infarct in cortex, day 1", "mass rim", "mass", "necrosis", "oedema", "lacune",
	"micro-bleed", "meningioma",
}
