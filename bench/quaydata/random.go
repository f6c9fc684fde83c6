package quaydata

import "math/bits"

// gamma is the increment of the splitmix64 generator, mix its output function
// (Steele, Lea and Flood, 2014, doi:10.1145/2714064.2660195).
const gamma = 0x9e3779b97f4a7c15

func mix(z uint64) uint64 {
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}

// draws is a splitmix64 generator that starts at a place given by keys.
type draws uint64

// at starts the draws of (seed, tag, key).
func at(seed, tag, key uint64) draws {
	return draws(mix(mix(mix(seed+gamma)^tag*gamma) + key*gamma))
}

func (s *draws) bits() uint64 {
	*s += gamma
	return mix(uint64(*s))
}

// unit is uniform on [0, 1), a multiple of 2^-53.
func (s *draws) unit() float64 { return float64(s.bits()>>11) * 0x1p-53 }

// below is uniform on 0..n-1, to within n/2^64.
func (s *draws) below(n uint64) uint64 {
	hi, _ := bits.Mul64(s.bits(), n)
	return hi
}

// shock has mean 0, standard deviation 1 and lies within 3 of zero: twice the
// sum of three uniforms on [-1/2, 1/2) (variance 4 * 3/12).
func (s *draws) shock() float64 {
	sum := s.unit() + s.unit()
	sum += s.unit()
	return 2 * (sum - 1.5)
}

// alias draws from a fixed discrete distribution in constant time (Vose, 1991,
// doi:10.1109/32.92917).
type alias struct {
	keep  []float64
	other []int32
}

// newAlias takes weights above zero; they need not add up to one.
func newAlias(weights []float64) alias {
	n := len(weights)
	total := 0.0
	for _, w := range weights {
		total += w
	}
	a := alias{keep: make([]float64, n), other: make([]int32, n)}
	scaled := make([]float64, n)
	var small, large []int32
	for i, w := range weights {
		scaled[i] = w / total * float64(n)
		if scaled[i] < 1 {
			small = append(small, int32(i))
		} else {
			large = append(large, int32(i))
		}
	}
	for len(small) > 0 && len(large) > 0 {
		s, l := small[len(small)-1], large[len(large)-1]
		small = small[:len(small)-1]
		a.keep[s], a.other[s] = scaled[s], l
		scaled[l] -= 1 - scaled[s]
		if scaled[l] < 1 {
			large = large[:len(large)-1]
			small = append(small, l)
		}
	}
	for _, i := range append(small, large...) {
		a.keep[i], a.other[i] = 1, i
	}
	return a
}

func (a alias) draw(s *draws) int32 {
	i := int32(s.below(uint64(len(a.keep))))
	if s.unit() < a.keep[i] {
		return i
	}
	return a.other[i]
}
