//go:build amd64 && !amd64.v3

package kernel

// tileWidth is 2 where the compiler puts a test of the processor and a call
// beside every math.FMA: each further accumulator is then saved and loaded
// around it, and 3 x 3 runs at 0.7 of the speed of 2 x 2.
const tileWidth = 2
