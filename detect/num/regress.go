package num

// Sums are the normal equations of a least squares fit of y on two regressors and,
// where it earns its place, a third.
type Sums struct {
	A00, A01, A11, B0, B1, YY float64
	A02, A12, A22, B2         float32 // of the third: it is small and only corrects
}

// Add takes one row.
func (s *Sums) Add(x0, x1, x2, y float64) {
	s.A00 += x0 * x0
	s.A01 += x0 * x1
	s.A11 += x1 * x1
	s.B0 += x0 * y
	s.B1 += x1 * y
	s.YY += y * y
	s.A02 += float32(x0 * x2)
	s.A12 += float32(x1 * x2)
	s.A22 += float32(x2 * x2)
	s.B2 += float32(x2 * y)
}

// Two solves for y = k0 x0 + k1 x1; rss is the residual sum of squares. ok is false
// where the regressors are one.
func (s *Sums) Two() (k0, k1, rss float64, ok bool) {
	det := s.A00*s.A11 - s.A01*s.A01
	if !(det > 0) {
		return 0, 0, s.YY, false
	}
	k0 = (s.B0*s.A11 - s.B1*s.A01) / det
	k1 = (s.B1*s.A00 - s.B0*s.A01) / det
	return k0, k1, s.YY - k0*s.B0 - k1*s.B1, true
}

// Three adds the third regressor to the solution of Two by what the first two leave
// of it (Frisch & Waugh 1933, Partial time regressions as compared with individual
// trends, Econometrica 1, 387). ok is false where they leave nothing.
func (s *Sums) Three() (k0, k1, k2, rss float64, ok bool) {
	k0, k1, rss, ok = s.Two()
	if !ok {
		return
	}
	det := s.A00*s.A11 - s.A01*s.A01
	a02, a12, a22, b2 := float64(s.A02), float64(s.A12), float64(s.A22), float64(s.B2)
	c0 := (a02*s.A11 - a12*s.A01) / det
	c1 := (a12*s.A00 - a02*s.A01) / det
	left := a22 - c0*a02 - c1*a12
	if !(left > 0.05*a22) {
		return k0, k1, 0, rss, false
	}
	k2 = (b2 - c0*s.B0 - c1*s.B1) / left
	return k0 - k2*c0, k1 - k2*c1, k2, max(rss-k2*k2*left, 0), true
}
