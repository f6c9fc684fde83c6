package kernel

// Panics for the caller's mistakes.
const (
	negRows    = "kernel: rows < 0"
	negCols    = "kernel: columns < 0"
	badStride  = "kernel: stride < rows"
	badLdd     = "kernel: ldd < columns of b"
	shortX     = "kernel: x too short"
	shortA     = "kernel: a too short"
	shortB     = "kernel: b too short"
	shortY     = "kernel: y too short"
	shortW     = "kernel: w too short"
	shortLow   = "kernel: low part too short"
	shortT     = "kernel: t too short"
	shortH     = "kernel: h too short"
	shortTheta = "kernel: theta too short"
	shortDst   = "kernel: dst too short"
)
