// Command _gen writes the assembly of the package above it.
package main

import (
	"github.com/mmcloughlin/avo/build"
	"github.com/tallrow/tallrow/accum/internal/kernel/_gen/asm"
)

func main() {
	asm.All()
	build.Generate()
}
