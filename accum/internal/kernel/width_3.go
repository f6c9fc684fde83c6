//go:build !amd64 || amd64.v3

package kernel

// tileWidth is 3 where math.FMA is a single instruction: nine accumulators and
// four operands fit sixteen registers, and 3 x 3 runs at 1.8 times the speed of
// 2 x 2. Twelve accumulators do not fit.
const tileWidth = 3
