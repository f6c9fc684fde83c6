package vcov

// classical is the covariance under errors of equal spread that do not move
// together,
//
//	V = s^2 (X'WX)^-1,  s^2 = RSS / (N - k)
//
// with t on N - k. Under precision weights the error of row i has variance
// s^2/w_i and V does not change when all weights are multiplied. It has no
// meaning under sampling weights. (Gauss-Markov; Aitken 1935.)
func (x *solution) classical() *estimate {
	df := float64(x.df())
	v := make([]float64, len(x.inverse))
	s2 := x.rss / df
	for i, m := range x.inverse {
		v[i] = s2 * m
	}
	r := &estimate{v: v, factor: 1, df: df, joint: plainJoint(df)}
	if x.apart != nil {
		r.apart = &apartMeat{rest: x.e.g, own: x.state.Apart.D, scale: s2}
	}
	return r
}
